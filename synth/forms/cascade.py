"""A cascade of first- and second-order sections.

Pole pairs and real poles become sections; each zero goes to the nearest pole that has room
(pairs of zeros first), and the sections stand in the order of rising Q, as is common
practice: the sharpest peak comes last, behind what attenuates around it.  Each section is a
short observable chain, so its zeros at the origin come from the structure.  The gain of
H(s) stands in the first section; scaling spreads it afterwards.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from fractions import Fraction

from synth import polynomials
from synth.forms.observable import observable_section
from synth.graph import INPUT, Block, BlockGraph
from synth.transfer import Factor, TransferFunction

__all__ = ["Section", "cascade", "sections"]


@dataclass
class Section:
    """Pole factors of one section and the zero factors given to it."""

    poles: list[Factor]
    zeros: list[Factor] = field(default_factory=list)

    @property
    def room(self) -> int:
        """How many more zeros fit."""
        return sum(p.degree for p in self.poles) - sum(z.degree for z in self.zeros)

    @property
    def q(self) -> float:
        """The Q that decides the place in the chain."""
        return max(abs(p.q) for p in self.poles)

    @property
    def frequency(self) -> float:
        """Geometric mean of the poles [rad/s]."""
        product = math.prod(p.natural_frequency for p in self.poles)
        return float(product ** (1 / len(self.poles)))


def cascade(target: TransferFunction) -> BlockGraph:
    """The cascade form of a proper H(s), weights exact as far as the factors are."""
    blocks: list[Block] = []
    source, first = INPUT, 1
    gain = target.gain
    for number, section in enumerate(sections(target), start=1):
        numerator = polynomials.product([(gain,), *(z.coefficients for z in section.zeros)])
        denominator = polynomials.product(p.coefficients for p in section.poles)
        a = list(reversed(denominator))
        b = list(reversed(numerator))
        b += [Fraction(0)] * (len(a) - len(b))
        chain, source = observable_section(
            b,
            a,
            source=source,
            first=first,
            adder=f"y{number}",
            label=lambda text, number=number: f"section {number}: {text}",  # type: ignore[misc]
        )
        blocks += chain
        first += len(a) - 1
        gain = Fraction(1)
    return BlockGraph("cascade", tuple(blocks), source)


def sections(target: TransferFunction) -> list[Section]:
    """Poles and zeros paired and put in order."""
    made = [Section([p]) for p in target.pole_factors]
    pairs = [z for z in target.zero_factors if z.degree == 2]
    singles = [z for z in target.zero_factors if z.degree == 1]
    for zero in sorted(pairs, key=lambda z: -abs(z.q)):
        _host_of_pair(made, zero).zeros.append(zero)
    for zero in sorted(singles, key=lambda z: -z.natural_frequency):
        hosts = [s for s in made if s.room >= 1]
        min(hosts, key=lambda s: _distance(s, zero)).zeros.append(zero)
    return sorted(made, key=lambda s: (s.q, s.frequency))


def _host_of_pair(made: list[Section], zero: Factor) -> Section:
    """The nearest section with room for a pair of zeros; two real poles join if none has."""
    hosts = [s for s in made if s.room >= 2]
    if hosts:
        return min(hosts, key=lambda s: _distance(s, zero))
    free = sorted((s for s in made if s.room == 1), key=lambda s: _distance(s, zero))
    first, second = free[:2]
    first.poles += second.poles
    made.remove(second)
    return first


def _distance(section: Section, zero: Factor) -> float:
    """Distance in octaves between a section's poles and a zero; a root at the origin counts
    as far below everything else."""
    tiny = 1e-300
    return abs(math.log(max(section.frequency, tiny)) - math.log(max(zero.natural_frequency, tiny)))
