"""From what population the parts of the boards come, as values that check themselves.

Everything is relative: a deviation of 0.01 is 1 %.  The default is what is common practice where
nothing is known of the lots: each part on its own, uniform within its tolerance, at the
temperature at which tolerances are stated, op-amps at their figure.

Words
-----
lot
    The parts of one board that come from the same reel: those of the same kind, value and
    tolerance, one line of the parts list.
matched network
    Parts made together on one substrate: a common deviation within their tolerance, and a
    small one of each part, so that the ratio of any two is far better than either.
temperature coefficient
    Relative change of a value per kelvin, about 25 deg C.
"""

from __future__ import annotations

import re
from dataclasses import dataclass, field

from synth.errors import JobError
from synth.quantities import show

__all__ = ["DISTRIBUTIONS", "REFERENCE_TEMPERATURE", "Network", "PartSpread", "Population"]

DISTRIBUTIONS = ("uniform", "normal")

REFERENCE_TEMPERATURE = 25.0
"""At which tolerances are stated [deg C] (common practice of data sheets)."""

COLDEST, HOTTEST = -100.0, 250.0
"""Range of temperatures [deg C], beyond that of any part on a board."""

LARGEST_COEFFICIENT = 2e-3
"""Of temperature [1/K]: over the whole range of temperatures a value then stays positive."""

_REFERENCE = re.compile(r"[RC][1-9][0-9]{0,4}")


@dataclass(frozen=True, kw_only=True)
class PartSpread:
    """How the parts of one kind, resistors or capacitors, are spread.

    Parameters
    ----------
    distribution
        Of a part within its tolerance: ``"uniform"``, or ``"normal"``, cut at three standard
        deviations, which are the tolerance; what is left has one of 0.3289 tolerances.
    lot
        Share of the tolerance that the lots take, a ratio: their offset is uniform within it, and
        parts are spread about the offset within the rest.
    temperature_coefficient
        Largest magnitude of the temperature coefficient [1/K]; that of each part is uniform
        within, of either sign.
    """

    distribution: str = "uniform"
    lot: float = 0.0
    temperature_coefficient: float = 0.0

    def __post_init__(self) -> None:
        if self.distribution not in DISTRIBUTIONS:
            raise JobError(
                f"got {self.distribution!r}, expected 'uniform' or 'normal'", key="distribution"
            )
        if not 0 <= self.lot <= 1:
            raise JobError(
                f"got {show(self.lot, '%')}, expected a share from 0 to 100 % of the tolerance",
                key="lot",
            )
        _check_coefficient(self.temperature_coefficient, "temperature_coefficient")


@dataclass(frozen=True, kw_only=True)
class Network:
    """Parts that are matched.

    Parameters
    ----------
    refs
        At least two, all resistors or all capacitors.
    tolerance
        Of the ratio of any two of them, a ratio; each part also keeps its own tolerance.
    tracking
        Largest difference of the temperature coefficients of any two [1/K]; None: each part has
        its own.
    """

    refs: tuple[str, ...]
    tolerance: float
    tracking: float | None = None

    def __post_init__(self) -> None:
        if len(self.refs) < 2:
            raise JobError(
                f"got {', '.join(self.refs) or 'no part'}, expected two or more parts that are "
                "matched to each other",
                key="refs",
            )
        for ref in self.refs:
            if not _REFERENCE.fullmatch(ref):
                raise JobError(
                    f"got the reference {ref!r}, expected one such as 'R3' or 'C1'", key="refs"
                )
            if self.refs.count(ref) > 1:
                raise JobError(f"got {ref} twice, expected each part once", key="refs")
        if len({ref[0] for ref in self.refs}) > 1:
            raise JobError(
                f"got {', '.join(self.refs)}, expected all resistors or all capacitors", key="refs"
            )
        if not 0 <= self.tolerance < 1:
            raise JobError(
                f"got {show(self.tolerance, '%')}, expected 0 to below 100 %", key="tolerance"
            )
        _check_coefficient(self.tracking or 0.0, "tracking")

    @property
    def half_tolerance(self) -> float:
        """Largest deviation h of one part from the common one: (1 + h)/(1 - h) is the largest
        ratio that is allowed."""
        return self.tolerance / (2 + self.tolerance)


@dataclass(frozen=True, kw_only=True)
class Population:
    """Where the parts of all boards come from.

    Parameters
    ----------
    resistors, capacitors
        How the parts of either kind are spread.
    networks
        Matched parts; no part is in two.
    temperature
        Lowest and highest temperature [deg C]: that of a board is uniform between them, the
        same for all its parts; None: 25 deg C.
    gain_bandwidth_spread
        Largest deviation of the gain-bandwidth of op-amps from their figure, a ratio: uniform
        within, the same for all op-amps of one package.
    """

    resistors: PartSpread = field(default_factory=PartSpread)
    capacitors: PartSpread = field(default_factory=PartSpread)
    networks: tuple[Network, ...] = ()
    temperature: tuple[float, float] | None = None
    gain_bandwidth_spread: float = 0.0

    def __post_init__(self) -> None:
        seen: dict[str, int] = {}
        for number, network in enumerate(self.networks, start=1):
            for ref in network.refs:
                if ref in seen:
                    raise JobError(
                        f"got {ref}, which is in network {seen[ref]} too, expected each part in "
                        "one network",
                        key=f"board.networks[{number}].refs",
                    )
                seen[ref] = number
        if not 0 <= self.gain_bandwidth_spread < 1:
            raise JobError(
                f"got {show(self.gain_bandwidth_spread, '%')}, expected 0 to below 100 %",
                key="board.op_amp.gain_bandwidth_spread",
            )
        self._check_temperature()

    def _check_temperature(self) -> None:
        """A range needs a coefficient, and a coefficient a range: alone neither does anything."""
        stated = [
            (f"board.{kind}s.temperature_coefficient", self.of(kind).temperature_coefficient)
            for kind in ("resistor", "capacitor")
        ]
        stated += [
            (f"board.networks[{n}].tracking", network.tracking or 0.0)
            for n, network in enumerate(self.networks, start=1)
        ]
        key = next((key for key, coefficient in stated if coefficient), "")
        if self.temperature is None:
            if key:
                raise JobError(
                    "got a temperature coefficient without temperatures, expected them as "
                    "board.temperature, such as ['0 degC', '60 degC']",
                    key=key,
                )
            return
        low, high = self.temperature
        if not COLDEST <= low < high <= HOTTEST:
            raise JobError(
                f"got {low:g} to {high:g} degC, expected {COLDEST:g} degC <= lowest < highest <= "
                f"{HOTTEST:g} degC",
                key="board.temperature",
            )
        if not key:
            raise JobError(
                "got temperatures without a temperature coefficient, expected one of "
                "board.resistors or board.capacitors, or the tracking of a network",
                key="board.temperature",
            )

    def of(self, kind: str) -> PartSpread:
        """The spread of ``"resistor"`` or ``"capacitor"``."""
        return self.capacitors if kind == "capacitor" else self.resistors

    @property
    def is_plain(self) -> bool:
        """Whether every part is on its own and uniform within its tolerance, and nothing else
        varies."""
        return self == Population()


def _check_coefficient(value: float, key: str) -> None:
    if not 0 <= value <= LARGEST_COEFFICIENT:
        raise JobError(
            f"got {show(value, 'ppm/K')}, expected 0 to {show(LARGEST_COEFFICIENT, 'ppm/K')}",
            key=key,
        )
