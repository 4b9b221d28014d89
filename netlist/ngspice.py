"""The one place that runs ngspice: a worker process behind a pipe, killed when it hangs.

The library lives in a process of its own (`netlist.ngspice_worker`), because it can crash,
hang, leak and print.  `Simulator` starts it, sends decks, waits no longer than its time limit,
and replaces it after a failure.  Nothing of it reaches this process's output.
"""

from __future__ import annotations

import ctypes.util
import os
import pickle
import re
import select
import struct
import subprocess
import sys
import tempfile
import time
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import Any, BinaryIO, cast

import numpy as np
from numpy.typing import NDArray

from synth.errors import (
    SimulationFailedError,
    SimulationTimeoutError,
    SimulatorMissingError,
)

__all__ = ["AcResult", "NoiseSpectrum", "Simulator", "TransientResult"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

TIME_LIMIT_S = 60.0
START_LIMIT_S = 60.0
MEMORY_LIMIT = 4 << 30
_WORKER = Path(__file__).with_name("ngspice_worker.py")
_LENGTH = struct.Struct("<Q")
_FORBIDDEN = re.compile(r"\s*(\*#|\.(control|include|inc|lib|csparam)\b)", re.IGNORECASE)
_NET = re.compile(r"[a-z][a-z0-9_]{0,30}")
INSTALL = (
    "install libngspice0 with the system's package manager (Debian: apt-get install libngspice0)"
)


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
        found = library or ctypes.util.find_library("ngspice")
        if found is None:
            raise SimulatorMissingError(f"the ngspice library was not found: {INSTALL}")
        self._library = found
        self._time_limit = time_limit
        self._memory_limit = memory_limit
        self._process: subprocess.Popen[bytes] | None = None
        self._ready = False
        self._folder = tempfile.TemporaryDirectory(prefix="polewright-")
        self._log: BinaryIO = tempfile.TemporaryFile()  # noqa: SIM115  (closed in close)
        self._start()

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
        return self._process.pid if self._process else None

    def close(self) -> None:
        """End the worker and remove its folder.  Safe to call twice."""
        self._stop()
        self._log.close()
        self._folder.cleanup()

    def ac(self, deck: str, nets: Sequence[str]) -> AcResult:
        """Run the ``.ac`` line of `deck`; responses of `nets`."""
        command = _card(deck, "ac")
        found = self._run(deck, "ac", "frequency", nets, command)
        return AcResult(found["frequency"].real.copy(), {n: found[n] for n in nets})

    def operating_point(self, deck: str, nets: Sequence[str]) -> dict[str, float]:
        """DC voltages of `nets` [V]."""
        found = self._run(deck, "op", "", nets, "op")
        return {n: float(found[n][0]) for n in nets}

    def transient(self, deck: str, nets: Sequence[str]) -> TransientResult:
        """Run the ``.tran`` line of `deck`; voltages of `nets`."""
        found = self._run(deck, "tran", "time", nets, _card(deck, "tran"))
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
        """Noise at `output_net` over a sweep by decades."""
        _check_nets([output_net])
        sweep = f"dec {points_per_decade:d} {float(start_hz)!r} {float(stop_hz)!r}"
        command = f"noise v({output_net}) {source.lower()} {sweep}"
        reply = self._request(
            {"task": "noise", "deck": _checked(deck), "net": output_net, "command": command}
        )
        return NoiseSpectrum(*cast("tuple[Real, Real, float]", reply))

    def alter_ac(self, deck: str, changes: Sequence[Mapping[str, float]], net: str) -> Complex:
        """Response of `net` for each set of changed part values, shape (boards, F).

        The deck is loaded once; each set changes the values it names, by reference, and leaves
        the others as the set before left them.
        """
        _check_nets([net])
        plain = [{ref: float(value) for ref, value in board.items()} for board in changes]
        refs = {ref for board in plain for ref in board}
        known = {line.split()[0].upper() for line in deck.splitlines() if line[:1] in tuple("RC")}
        if not refs <= known:
            raise SimulationFailedError(f"the deck has no part {min(refs - known)!r}")
        request: dict[str, object] = {
            "task": "alter",
            "deck": _checked(deck),
            "command": _card(deck, "ac"),
        }
        return cast("Complex", self._request({**request, "net": net, "changes": plain}))

    def _run(
        self, deck: str, kind: str, scale: str, nets: Sequence[str], command: str
    ) -> dict[str, NDArray[Any]]:
        _check_nets(nets)
        request: dict[str, object] = {
            "task": "run",
            "deck": _checked(deck),
            "kind": kind,
            "scale": scale,
        }
        reply = self._request({**request, "nets": list(nets), "command": command})
        return cast("dict[str, NDArray[Any]]", reply)

    def _request(self, request: dict[str, object]) -> object:
        """Send a request and wait for the reply; the worker is replaced after any failure."""
        if self._log.closed:
            raise SimulationFailedError("the simulator was closed before this call")
        if self._process is None:
            self._start()
        try:
            if not self._ready:
                self._receive(time.monotonic() + START_LIMIT_S)
                self._ready = True
            self._send(request)
            return self._receive(time.monotonic() + self._time_limit)
        except BaseException:
            self._stop()
            raise

    def _start(self) -> None:
        environment = {
            **os.environ,
            "HOME": self._folder.name,  # no .spiceinit of the user
            "OPENBLAS_NUM_THREADS": "1",
            "OMP_NUM_THREADS": "1",
        }
        self._log.seek(0)
        self._log.truncate()
        self._ready = False
        # -P: the folder of the worker's own file is not searched for modules.
        self._process = subprocess.Popen(
            [sys.executable, "-P", str(_WORKER), self._library, str(self._memory_limit)],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=self._log,
            cwd=self._folder.name,
            env=environment,
            bufsize=0,
            start_new_session=True,
        )

    def _stop(self) -> None:
        process, self._process = self._process, None
        if process is None:
            return
        process.kill()
        for stream in (process.stdin, process.stdout):
            if stream:
                stream.close()
        process.wait()

    def _send(self, request: dict[str, object]) -> None:
        assert self._process is not None and self._process.stdin is not None
        payload = pickle.dumps(request, protocol=pickle.HIGHEST_PROTOCOL)
        rest = memoryview(_LENGTH.pack(len(payload)) + payload)
        try:
            while rest:
                rest = rest[self._process.stdin.write(rest) :]
        except BrokenPipeError:
            raise self._crashed() from None

    def _receive(self, deadline: float) -> object:
        """The value of a reply; its errors become ours."""
        (length,) = _LENGTH.unpack(self._read(_LENGTH.size, deadline))
        reply = pickle.loads(self._read(length, deadline))
        if reply[0] == "done":
            return reply[1]
        _, message, log = reply
        if reply[0] == "missing":
            raise SimulatorMissingError(
                f"the ngspice library could not be loaded ({message}): {INSTALL}", log=log
            )
        raise SimulationFailedError(f"ngspice failed: {message}", log=log)

    def _read(self, size: int, deadline: float) -> bytes:
        """Exactly `size` bytes from the worker, or an error at the deadline or at its end."""
        assert self._process is not None and self._process.stdout is not None
        pipe = self._process.stdout.fileno()
        kept = bytearray()
        while len(kept) < size:
            left = deadline - time.monotonic()
            if left <= 0 or not select.select([pipe], [], [], left)[0]:
                raise SimulationTimeoutError(
                    f"ngspice passed its time limit of {self._time_limit:g} s and was ended; "
                    "allow more time or check the circuit for values far apart",
                    log=self._log_text(),
                )
            piece = os.read(pipe, min(size - len(kept), 1 << 20))
            if not piece:
                raise self._crashed()
            kept += piece
        return bytes(kept)

    def _crashed(self) -> SimulationFailedError:
        code = self._process.wait() if self._process else None
        how = f"signal {-code}" if code is not None and code < 0 else f"exit code {code}"
        return SimulationFailedError(
            f"ngspice ended in the middle of its work ({how}); try again, and check the deck "
            "with ngspice -b if it happens again",
            log=self._log_text(),
        )

    def _log_text(self) -> str:
        self._log.seek(0)
        return self._log.read().decode("utf-8", "replace")


def _card(deck: str, kind: str) -> str:
    """The analysis line of a deck as a command, ``.ac dec ...`` as ``ac dec ...``."""
    for line in deck.splitlines():
        if line.startswith(f".{kind} "):
            return line[1:]
    raise SimulationFailedError(f"the deck has no .{kind} line")


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
