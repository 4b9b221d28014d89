"""The parts list: what is bought for a board, identical parts on one line.

Besides the resistors, capacitors and op-amps of the signal path it names what the signal path
takes for granted (all common practice):

- op-amps come in packages of four and two: the fewest packages, then the fewest spare op-amps;
  a spare is wired as a follower with its + input at ground, so that it neither oscillates nor
  loads the supply;
- 100 nF from each supply pin of each package to ground, and 10 uF from each rail to ground;
- a capacitor in a time constant is C0G up to 100 nF and polypropylene (PP) or polyphenylene
  sulphide (PPS) film above: other ceramics move with voltage, temperature and time;
- the rated voltage of a capacitor is the next standard one at or above twice what it can see:
  the rails across a signal capacitor, one rail across a decoupling capacitor.

A line holds parts that are bought alike: those of a matched network stand apart from single ones
of the same value, and a remark names the network, and the parts whose value the job states.

The marking starts with the value code of IEC 60062; for a capacitor, dielectric and rated
voltage follow it.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass

from synth.circuit import Amplifier, Circuit, Passive
from synth.parts import OP_AMPS_PER_PACKAGE
from synth.population import Network
from synth.quantities import marking, show

__all__ = ["Package", "PartLine", "dielectric", "packages", "parts_list", "rated_voltage"]

RATINGS = (6.3, 10.0, 16.0, 25.0, 35.0, 50.0, 63.0, 100.0, 160.0, 250.0, 400.0, 630.0)
"""Standard rated voltages of capacitors [V], common practice."""

LARGEST_C0G = 100e-9
DECOUPLING, BULK = 100e-9, 10e-6


@dataclass(frozen=True, kw_only=True)
class PartLine:
    """One line of the parts list.

    Parameters
    ----------
    refs
        References; as many as parts.
    kind
        ``"resistor"``, ``"capacitor"`` or ``"op_amp"`` in the signal path; outside it
        ``"spare_op_amp"``, ``"package"`` (what op-amps are bought in),
        ``"decoupling_capacitor"`` or ``"bulk_capacitor"``.
    value
        [ohm] or [F]; None where a value means nothing.
    marking
        Value code, then dielectric and rating; or the class of an op-amp.
    series
        Of preferred numbers, ``"stock"``, ``"fixed"`` for a value by hand of no series, or ``""``.
    tolerance
        A ratio, or None.
    note
        What to know when buying or placing it.
    """

    refs: tuple[str, ...]
    kind: str
    value: float | None = None
    marking: str = ""
    series: str = ""
    tolerance: float | None = None
    note: str = ""

    @property
    def quantity(self) -> int:
        """How many."""
        return len(self.refs)


@dataclass(frozen=True, kw_only=True)
class Package:
    """Two or four op-amps in one package, spare ones at the end."""

    ref: str
    op_amps: tuple[str, ...]
    spares: tuple[str, ...] = ()

    @property
    def size(self) -> int:
        """How many op-amps it holds."""
        return len(self.op_amps) + len(self.spares)


def parts_list(
    circuit: Circuit, *, supply: tuple[float, float], networks: Sequence[Network] = ()
) -> tuple[PartLine, ...]:
    """Every part of the board.

    Parameters
    ----------
    supply
        The negative and the positive rail [V].
    networks
        Parts that are bought matched to each other.
    """
    low, high = supply
    across = rated_voltage(high - low)
    chips = packages(circuit.amplifiers, taken=circuit.by_ref)
    return (
        *_grouped(circuit.bought, across, networks),
        *_op_amps(circuit.amplifiers, chips),
        *_supply_parts(chips, supply, taken=circuit.by_ref),
    )


def packages(amplifiers: Iterable[Amplifier], *, taken: Iterable[str] = ()) -> tuple[Package, ...]:
    """The fewest packages of four and two that hold the op-amps, in their order.

    `taken` are references of other parts, which packages and spares keep away from.
    """
    refs = [a.ref for a in amplifiers]
    names = _free("IC", {*refs, *taken})
    spares = _free("U", {*refs, *taken})
    out: list[Package] = []
    for start in range(0, len(refs), OP_AMPS_PER_PACKAGE):
        held = tuple(refs[start : start + OP_AMPS_PER_PACKAGE])
        size = 2 if len(held) <= 2 else OP_AMPS_PER_PACKAGE
        idle = tuple(next(spares) for _ in range(size - len(held)))
        out.append(Package(ref=next(names), op_amps=held, spares=idle))
    return tuple(out)


def dielectric(value: float) -> str:
    """Dielectric for a capacitor of `value` [F] in a time constant (common practice)."""
    return "C0G" if value <= LARGEST_C0G * (1 + 1e-9) else "PP/PPS film"


def rated_voltage(seen: float) -> float:
    """The standard rating [V] at or above twice the largest voltage `seen` [V]."""
    return next((r for r in RATINGS if r >= 2 * seen * (1 - 1e-9)), 2 * seen)


def _grouped(
    parts: tuple[Passive, ...], across: float, networks: Sequence[Network]
) -> Iterator[PartLine]:
    """Identical resistors, then identical capacitors, by rising value; those of a network
    behind single ones."""
    network_of = {ref: k for k, each in enumerate(networks) for ref in each.refs}
    groups: dict[tuple[str, float, str, float, int], list[Passive]] = {}
    for part in parts:
        place = network_of.get(part.ref, -1)
        key = part.kind, part.value, part.source, part.tolerance, place
        groups.setdefault(key, []).append(part)
    for kind in ("resistor", "capacitor"):
        for key in sorted(k for k in groups if k[0] == kind):
            _, value, series, tolerance, place = key
            words = "" if kind == "resistor" else f" {dielectric(value)} {across:g}V"
            said = [] if place < 0 else [_matched(networks[place])]
            yield PartLine(
                refs=tuple(sorted((p.ref for p in groups[key]), key=_natural)),
                kind=kind,
                value=value,
                marking=marking(value, kind) + words,
                series=series,
                tolerance=tolerance,
                note="; ".join([*said, *_stated(groups[key])]),
            )


def _matched(network: Network) -> str:
    """What to order of a network."""
    tracking = network.tracking
    tracks = "" if tracking is None else f", tracking {show(tracking, 'ppm/K')}"
    refs = " ".join(sorted(network.refs, key=_natural))
    return f"matched network {refs}: ratio within {show(network.tolerance, '%')}{tracks}"


def _stated(parts: Iterable[Passive]) -> list[str]:
    """Which parts of a line have their value from the job."""
    refs = sorted((p.ref for p in parts if p.fixed), key=_natural)
    return [f"value of {' '.join(refs)} stated in the job"] if refs else []


def _op_amps(amplifiers: tuple[Amplifier, ...], chips: tuple[Package, ...]) -> Iterator[PartLine]:
    classes: dict[str, list[str]] = {}
    for amp in amplifiers:
        classes.setdefault(amp.figures.kind, []).append(amp.ref)
    for name, refs in classes.items():
        yield PartLine(
            refs=tuple(sorted(refs, key=_natural)),
            kind="op_amp",
            marking=name,
            note="in the packages below",
        )
    spares = tuple(ref for chip in chips for ref in chip.spares)
    if spares:
        yield PartLine(
            refs=spares,
            kind="spare_op_amp",
            marking="follower, + to ground",
            note="output to its own − input, + input to ground",
        )
    for chip in chips:
        word = {2: "dual", 4: "quad"}[chip.size]
        yield PartLine(
            refs=(chip.ref,),
            kind="package",
            marking=f"{word} op-amp: {' '.join((*chip.op_amps, *chip.spares))}",
            note="what is ordered",
        )


def _supply_parts(
    chips: tuple[Package, ...], supply: tuple[float, float], *, taken: Iterable[str]
) -> Iterator[PartLine]:
    if not chips:
        return
    volts = rated_voltage(max(-supply[0], supply[1]))
    used = set(taken)
    names = _free("CD", used)
    yield PartLine(
        refs=tuple(next(names) for _ in range(2 * len(chips))),
        kind="decoupling_capacitor",
        value=DECOUPLING,
        marking=f"{marking(DECOUPLING, 'capacitor')} X7R {volts:g}V",
        tolerance=0.1,
        note="each supply pin of each package to ground, as close as it goes",
    )
    names = _free("CB", used)
    yield PartLine(
        refs=(next(names), next(names)),
        kind="bulk_capacitor",
        value=BULK,
        marking=f"{marking(BULK, 'capacitor')} electrolytic {volts:g}V",
        tolerance=0.2,
        note="each rail to ground, where the supply enters",
    )


def _free(prefix: str, taken: set[str]) -> Iterator[str]:
    """Unused references with this prefix, counting on from the highest used one."""
    pattern = re.compile(re.escape(prefix) + r"(\d+)")
    used = [int(m[1]) for ref in taken if (m := pattern.fullmatch(ref))]
    number = max(used, default=0)
    while True:
        number += 1
        yield f"{prefix}{number}"


def _natural(ref: str) -> tuple[str, int, str]:
    """Sorts R2 before R10."""
    match = re.fullmatch(r"(\D*)(\d*)(.*)", ref)
    head, digits, rest = match.groups() if match else (ref, "", "")
    return head, int(digits or 0), rest
