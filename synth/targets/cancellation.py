"""Poles and zeros that coincide, exactly or nearly.

Factors that stay are kept as they are, so a target stated by its roots keeps its exact factors.
A pole that does not decay is cancelled only by a zero that lies on it exactly: beside it, however
close, the mode would still grow.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass
from fractions import Fraction

from synth import polynomials
from synth.targets.bounds import root_text
from synth.transfer import Factor, TransferFunction

__all__ = ["COINCIDENCE", "cancelled"]

COINCIDENCE = 1e-6
"""A pole p and a zero z cancel when |z - p| is at most this times |Re p|; leaving both out
then changes H by no more than about this share at any frequency."""


def cancelled(target: TransferFunction) -> tuple[TransferFunction, list[str]]:
    """The target without the poles and zeros that coincide, and a notice for each.

    Returns `target` itself when nothing cancels.  The leading coefficient stays as it is.
    """
    common, exact = _exactly_cancelled(target)
    pairs, kept = _coinciding(exact)
    reduced = _without(exact, pairs) if pairs else exact
    order = f"H(s) of order {reduced.order} is built instead of order {target.order}"
    notices = []
    for factor in common:
        decays = all(r.real < 0 for r in factor.roots)
        warning = "" if decays else ", a mode that does not decay and that the board will not have"
        notices.append(f"a pole and a zero at {root_text(factor)} cancel{warning}; {order}")
    notices += [f"{p} coincide within {COINCIDENCE:g} and cancel; {order}" for p in pairs]
    notices += [f"{p} nearly coincide but both stay, because the pole does not decay" for p in kept]
    return reduced, notices


def _exactly_cancelled(target: TransferFunction) -> tuple[tuple[Factor, ...], TransferFunction]:
    """Factors common to numerator and denominator, and the target without them."""
    common = polynomials.greatest_common_divisor(target.numerator, target.denominator)
    if len(common) == 1:
        return (), target
    factors = TransferFunction.from_polynomials(common, (Fraction(1),)).zero_factors
    if target.factors_are_exact:
        shared = Counter(target.zero_factors) & Counter(target.pole_factors)
        if polynomials.product(f.coefficients for f in shared.elements()) == common:
            return factors, TransferFunction.from_factors(
                target.gain,
                (Counter(target.zero_factors) - shared).elements(),
                (Counter(target.pole_factors) - shared).elements(),
            )
    return factors, TransferFunction.from_polynomials(
        polynomials.divide(target.numerator, common)[0],
        polynomials.divide(target.denominator, common)[0],
    )


@dataclass(frozen=True)
class _Mode:
    """A real root, or the upper root of a conjugate pair: root number `place` of factor number
    `index`."""

    index: int
    place: int
    root: complex


@dataclass(frozen=True)
class _Coincidence:
    pole: _Mode
    zero: _Mode

    def __str__(self) -> str:
        pole, zero = (root_text(_factor(m.root), 9) for m in (self.pole, self.zero))
        return f"the pole at {pole} and the zero at {zero}"


def _modes(factors: tuple[Factor, ...]) -> list[_Mode]:
    return [
        _Mode(index, place, root)
        for index, factor in enumerate(factors)
        for place, root in enumerate(_roots(factor))
        if root.imag >= 0
    ]


def _roots(factor: Factor) -> tuple[complex, ...]:
    """The roots, those of a pair that rounding may have split off a double real root as two
    real ones."""
    roots = factor.roots
    if roots[0].imag and abs(roots[0].imag) <= COINCIDENCE * abs(roots[0].real):
        return (complex(roots[0].real),) * 2
    return roots


def _factor(root: complex) -> Factor:
    """The real factor of a real root, or of a root and its conjugate."""
    re, im = Fraction(root.real), Fraction(root.imag)
    if not im:
        return Factor.real(re)
    return Factor((Fraction(1), -2 * re, re * re + im * im))


def _coinciding(target: TransferFunction) -> tuple[list[_Coincidence], list[_Coincidence]]:
    """Poles and zeros that nearly coincide: those to cancel, the closest first, and those to
    keep because the pole does not decay."""
    found = []
    for pole in _modes(target.pole_factors):
        for zero in _modes(target.zero_factors):
            distance = abs(zero.root - pole.root)
            decays = pole.root.real < 0
            # A slowly decaying pair shows a zero beside it more: hence its real part.
            reach = abs(pole.root.real) if decays else abs(pole.root)
            if distance <= COINCIDENCE * reach and (not pole.root.imag) == (not zero.root.imag):
                found.append((distance / reach if reach else 0.0, _Coincidence(pole, zero)))
    chosen: list[_Coincidence] = []
    for _, pair in sorted(found, key=lambda entry: entry[0]):
        if all(pair.pole != c.pole and pair.zero != c.zero for c in chosen):
            chosen.append(pair)
    decaying = [c for c in chosen if c.pole.root.real < 0]
    return decaying, [c for c in chosen if c not in decaying]


def _without(target: TransferFunction, pairs: list[_Coincidence]) -> TransferFunction:
    """The target without these poles and zeros, its leading coefficient unchanged."""
    return TransferFunction.from_factors(
        target.gain,
        _remaining(target.zero_factors, [p.zero for p in pairs]),
        _remaining(target.pole_factors, [p.pole for p in pairs]),
    )


def _remaining(factors: tuple[Factor, ...], gone: list[_Mode]) -> list[Factor]:
    """The factors without some modes; of a pair of real roots the other one may stay."""
    out: list[Factor] = []
    for index, factor in enumerate(factors):
        places = {m.place for m in gone if m.index == index}
        if not places:
            out.append(factor)
        elif not _roots(factor)[0].imag:
            out += [_factor(r) for place, r in enumerate(_roots(factor)) if place not in places]
    return out
