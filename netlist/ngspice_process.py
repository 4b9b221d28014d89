"""The worker process from outside: started, spoken to within time limits, killed, replaced.

See `netlist.ngspice_worker` for what runs inside.
"""

from __future__ import annotations

import os
import pickle
import select
import struct
import subprocess
import sys
import tempfile
import time
from pathlib import Path
from typing import BinaryIO

from synth.errors import (
    SimulationFailedError,
    SimulationTimeoutError,
    SimulatorMissingError,
)

__all__ = ["INSTALL", "WorkerProcess"]

START_LIMIT_S = 60.0
INSTALL = (
    "install libngspice0 with the system's package manager (Debian: apt-get install libngspice0)"
)
_WORKER = Path(__file__).with_name("ngspice_worker.py")
_LENGTH = struct.Struct("<Q")


class WorkerProcess:
    """A worker with the ngspice library `library`; it may use `memory_limit` bytes.

    The process starts at once and in the background; the first request waits for it.  After any
    failure it is ended, and the next request starts another.
    """

    def __init__(self, library: str, *, memory_limit: int) -> None:
        self._library = library
        self._memory_limit = memory_limit
        self._process: subprocess.Popen[bytes] | None = None
        self._ready = False
        self._folder = tempfile.TemporaryDirectory(prefix="polewright-")
        self._log: BinaryIO = tempfile.TemporaryFile()  # noqa: SIM115  (closed in close)
        self._start()

    @property
    def process_id(self) -> int | None:
        """Process id, None when there is no process at the moment."""
        return self._process.pid if self._process else None

    def close(self) -> None:
        """End the process and remove its folder.  Safe to call twice."""
        self._stop()
        self._log.close()
        self._folder.cleanup()

    def request(self, request: dict[str, object], *, time_limit: float) -> object:
        """Send a request and wait at most `time_limit` seconds for the reply.

        Raises
        ------
        SimulatorMissingError, SimulationFailedError, SimulationTimeoutError
            The library cannot be loaded; it refused or crashed; the limit passed.
        """
        if self._log.closed:
            raise SimulationFailedError("the simulator was closed before this call")
        if self._process is None:
            self._start()
        try:
            if not self._ready:
                self._receive(START_LIMIT_S)
                self._ready = True
            self._send(request)
            return self._receive(time_limit)
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
        # -P: the folder of the worker's own file is not searched for modules.  -W: a user may have
        # made warnings errors, and PySpice has some.
        self._process = subprocess.Popen(
            [
                sys.executable,
                "-P",
                "-W",
                "ignore",
                str(_WORKER),
                self._library,
                str(self._memory_limit),
            ],
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

    def _receive(self, limit: float) -> object:
        """The value of a reply within `limit` seconds; its errors become ours."""
        deadline = time.monotonic() + limit
        (length,) = _LENGTH.unpack(self._read(_LENGTH.size, deadline, limit))
        reply = pickle.loads(self._read(length, deadline, limit))
        if reply[0] == "done":
            return reply[1]
        _, message, log = reply
        if reply[0] == "missing":
            raise SimulatorMissingError(
                f"the ngspice library could not be loaded ({message}): {INSTALL}", log=log
            )
        raise SimulationFailedError(f"ngspice failed: {message}", log=log)

    def _read(self, size: int, deadline: float, limit: float) -> bytes:
        """Exactly `size` bytes from the worker, or an error at the deadline or at its end."""
        assert self._process is not None and self._process.stdout is not None
        pipe = self._process.stdout.fileno()
        kept = bytearray()
        while len(kept) < size:
            left = deadline - time.monotonic()
            if left <= 0 or not select.select([pipe], [], [], left)[0]:
                raise SimulationTimeoutError(
                    f"ngspice passed its time limit of {limit:g} s and was ended; check the "
                    "circuit for oscillation and for values far apart",
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
