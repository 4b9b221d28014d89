"""The one place that runs ngspice.

The library lives in a process of its own (`netlist.ngspice_process`, `netlist.ngspice_worker`),
because it can crash, hang, leak and print.  A `Simulator` sends it decks, waits no longer than its
time limit, and has it replaced after a failure.  Nothing of it reaches this process's output.
"""

from __future__ import annotations

import ctypes.util
import os
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from types import TracebackType
from typing import Any, cast

import numpy as np
from numpy.typing import NDArray

from netlist.ngspice_process import INSTALL, WorkerProcess
from synth.errors import SimulationFailedError, SimulatorMissingError
from synth.grid import Sweep, joined

__all__ = ["LIBRARY_VARIABLE", "AcResult", "NoiseSpectrum", "Simulator", "TransientResult"]

LIBRARY_VARIABLE = "NGSPICE_LIBRARY_PATH"
"""Environment variable that names the ngspice library where the system does not find it."""

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

LAST = 1e-9
"""How far (a ratio) the last frequency of a sweep may lie beyond the one asked for, by rounding."""

TIME_LIMIT_S = 60.0
MEMORY_LIMIT = 4 << 30
_FORBIDDEN = re.compile(r"\s*(\*#|\.(control|include|inc|lib|csparam)\b)", re.IGNORECASE)
_NET = re.compile(r"[a-z][a-z0-9_]{0,30}")


@dataclass(frozen=True)
class AcResult:
    """Complex voltages per volt of the source over `frequency_hz` [Hz], shapes (F,)."""

    frequency_hz: Real
    voltages: dict[str, Complex]


@dataclass(frozen=True)
class TransientResult:
    """Voltages [V] over `time_s` [s], which is not evenly spaced; shapes (T,)."""

    time_s: Real
    voltages: dict[str, Real]


@dataclass(frozen=True)
class NoiseSpectrum:
    """Noise at the output: `density` [V/rtHz] over `frequency_hz` [Hz], shapes (F,), and its
    root mean square over the whole sweep [V]."""

    frequency_hz: Real
    density: Real
    total_rms: float


class Simulator:
    """An ngspice library in a worker process.

    Use it as a context manager.  The worker starts at once and in the background; the first
    call waits for it.

    Parameters
    ----------
    library
        Name or path of the ngspice library; None: the one of the system.
    time_limit
        How long one call may take [s].
    memory_limit
        Address space of the worker [byte].

    Raises
    ------
    SimulatorMissingError
        No ngspice library.
    """

    def __init__(
        self,
        *,
        library: str | None = None,
        time_limit: float = TIME_LIMIT_S,
        memory_limit: int = MEMORY_LIMIT,
    ) -> None:
        found = library or os.environ.get(LIBRARY_VARIABLE) or ctypes.util.find_library("ngspice")
        if found is None:
            raise SimulatorMissingError(f"the ngspice library was not found: {INSTALL}")
        self._time_limit = time_limit
        self._worker = WorkerProcess(found, memory_limit=memory_limit)

    def __enter__(self) -> Simulator:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    @property
    def process_id(self) -> int | None:
        """Process id of the worker, None when there is none at the moment."""
        return self._worker.process_id

    def close(self) -> None:
        """End the worker.  Safe to call twice."""
        self._worker.close()

    def ac(self, deck: str, nets: Sequence[str]) -> AcResult:
        """Run the ``.ac`` lines of `deck`; responses of `nets` over the frequencies of all of
        them, in rising order.

        A sweep of very small steps goes on past its last frequency, by up to a thousandth (seen
        with ngspice 39); what is beyond is dropped.
        """
        found = []
        for line in _cards(deck, "ac"):
            one = self._run(deck, "ac", "frequency", nets, line)
            last = float(line.split()[-1]) * (1 + LAST)
            count = int(np.count_nonzero(one["frequency"].real <= last))
            found.append({name: vector[:count] for name, vector in one.items()})
        sweeps = [one["frequency"].real for one in found]
        order = joined(sweeps)
        voltages = {n: np.concatenate([one[n] for one in found])[order] for n in nets}
        return AcResult(np.concatenate(sweeps)[order], voltages)

    def operating_point(self, deck: str, nets: Sequence[str]) -> dict[str, float]:
        """DC voltages of `nets` [V]."""
        found = self._run(deck, "op", "", nets, "op")
        return {n: float(found[n][0]) for n in nets}

    def transient(
        self, deck: str, nets: Sequence[str], *, time_limit: float | None = None
    ) -> TransientResult:
        """Run the ``.tran`` line of `deck`; voltages of `nets`.

        `time_limit` [s] stands in for that of the simulator.
        """
        found = self._run(deck, "tran", "time", nets, _card(deck, "tran"), time_limit=time_limit)
        return TransientResult(found["time"], {n: found[n] for n in nets})

    def noise(
        self,
        deck: str,
        output_net: str,
        start_hz: float,
        stop_hz: float,
        points_per_decade: int,
        *,
        source: str = "Vin",
    ) -> NoiseSpectrum:
        """Noise at `output_net` over a sweep by decades, from `start_hz` to `stop_hz`.

        ngspice ends its noise sweep short of the last frequency, and its own total is no number
        where the density is flat (seen with ngspice 39).  So the sweep goes one step further,
        the last point is interpolated, and the total is integrated here, the density between
        two points being a power of the frequency.
        """
        _check_nets([output_net])
        beyond = stop_hz * 10 ** (1 / points_per_decade)
        sweep = f"dec {points_per_decade:d} {float(start_hz)!r} {float(beyond)!r}"
        command = f"noise v({output_net}) {source.lower()} {sweep}"
        reply = self._request(
            {"task": "noise", "deck": _checked(deck), "net": output_net, "command": command}
        )
        frequency, density = cast("tuple[Real, Real]", reply)
        return _cut_at(stop_hz, frequency, density)

    def alter_ac(self, deck: str, changes: Sequence[Mapping[str, float]], net: str) -> Complex:
        """Response of `net` for each set of changed part values, shape (boards, F), over the
        frequencies of `ac`.

        The deck is loaded once; each set changes the values it names, by reference, and leaves
        the others as the set before left them.
        """
        _check_nets([net])
        plain = [{ref: float(value) for ref, value in board.items()} for board in changes]
        refs = {ref for board in plain for ref in board}
        known = {line.split()[0].upper() for line in deck.splitlines() if line[:1] in tuple("RC")}
        if not refs <= known:
            raise SimulationFailedError(f"the deck has no part {min(refs - known)!r}")
        request: dict[str, object] = {"task": "alter", "deck": _checked(deck), "net": net}
        cards = _cards(deck, "ac")
        sweeps = [_swept(line) for line in cards]
        found = [
            cast("Complex", self._request({**request, "command": line, "changes": plain}))
            for line in cards
        ]
        within = [one[:, : f.size] for one, f in zip(found, sweeps, strict=True)]
        return np.concatenate(within, axis=1)[:, joined(sweeps)]

    def _run(
        self,
        deck: str,
        kind: str,
        scale: str,
        nets: Sequence[str],
        command: str,
        *,
        time_limit: float | None = None,
    ) -> dict[str, NDArray[Any]]:
        _check_nets(nets)
        request: dict[str, object] = {
            "task": "run",
            "deck": _checked(deck),
            "kind": kind,
            "scale": scale,
        }
        reply = self._request(
            {**request, "nets": list(nets), "command": command}, time_limit=time_limit
        )
        return cast("dict[str, NDArray[Any]]", reply)

    def _request(self, request: dict[str, object], *, time_limit: float | None = None) -> object:
        limit = self._time_limit if time_limit is None else time_limit
        return self._worker.request(request, time_limit=limit)


def _cut_at(stop_hz: float, frequency_hz: Real, density: Real) -> NoiseSpectrum:
    """A spectrum that ends at `stop_hz`, straight lines on logarithmic axes between points."""
    tiny = np.finfo(float).tiny
    x, y = np.log(frequency_hz), np.log(np.maximum(density, tiny))
    below = x < np.log(stop_hz) - 1e-9
    last = np.interp(np.log(stop_hz), x, y)
    x, y = np.append(x[below], np.log(stop_hz)), np.append(y[below], last)
    f, d = np.append(frequency_hz[below], stop_hz), np.append(density[below], np.exp(last))
    # The integral of d^2 f over ln f from point to point, d^2 f being exponential in ln f.
    width, growth = np.diff(x), np.diff(2 * y + x)
    mean = np.where(np.abs(growth) > 1e-9, np.expm1(growth) / np.where(growth, growth, 1.0), 1.0)
    power = np.sum(d[:-1] ** 2 * f[:-1] * width * mean)
    return NoiseSpectrum(f, d, float(np.sqrt(power)))


def _card(deck: str, kind: str) -> str:
    """The first of `_cards`."""
    return _cards(deck, kind)[0]


def _cards(deck: str, kind: str) -> list[str]:
    """The analysis lines of a deck as commands, ``.ac dec ...`` as ``ac dec ...``."""
    found = [line[1:] for line in deck.splitlines() if line.startswith(f".{kind} ")]
    if not found:
        raise SimulationFailedError(f"the deck has no .{kind} line")
    return found


def _swept(command: str) -> Real:
    """The frequencies of ``ac dec points from to`` [Hz]."""
    points, start, stop = command.split()[2:5]
    return Sweep(float(start), float(stop), int(points)).frequencies


def _check_nets(nets: Sequence[str]) -> None:
    for net in nets:
        if not _NET.fullmatch(net):
            raise SimulationFailedError(f"got the net name {net!r}, expected one such as 'out'")


def _checked(deck: str) -> str:
    """The deck, refused when a line of it would make the simulator do more than simulate."""
    if not deck.isascii():
        raise SimulationFailedError("the deck holds characters beyond ASCII")
    for line in deck.splitlines():
        if _FORBIDDEN.match(line):
            raise SimulationFailedError(f"the deck holds a line that is not allowed: {line[:60]!r}")
    return deck
