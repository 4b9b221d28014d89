"""The process that runs ngspice: a program of its own, spoken to over a pipe.

Started by `netlist.ngspice_process` as ``ngspice_worker.py LIBRARY MEMORY``; it imports
nothing of this project.  Requests come on standard input, replies go to what was standard
output, each a pickle behind its length in 8 bytes, little-endian.  Whatever the library prints
goes to standard error, which the parent keeps as a log.

A request is a dictionary with ``task``, ``deck`` and arguments; a reply is ``("done", value)``
or ``("missing" | "failed", message, log)``.  The first reply comes unasked, when the library is
loaded.
"""

from __future__ import annotations

import contextlib
import logging
import os
import pickle
import re
import resource
import signal
import struct
import sys
import threading
import time
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any, BinaryIO

if TYPE_CHECKING:
    from numpy.typing import NDArray

__all__ = ["main"]

LENGTH = struct.Struct("<Q")
PARENT_POLL_S = 0.5
LONGEST_COMMAND = 1000
_BAD = re.compile(r"error|abort|fatal|singular|unknown|too many|can't|cannot", re.IGNORECASE)
# A step towards an operating point may fail, and the next one succeed.
_HARMLESS = re.compile(
    r"Note:|Warning:|Using |Doing analysis|No\. of Data|Trying gmin", re.IGNORECASE
)


class _RefusedError(Exception):
    """The simulator did not do what was asked; the message says what it said."""


class _Session:
    """One loaded library."""

    def __init__(self, library: str) -> None:
        os.environ["NGSPICE_LIBRARY_PATH"] = library
        logging.disable(logging.CRITICAL)
        import numpy as np
        from PySpice.Spice.NgSpice.Shared import NgSpiceCommandError, NgSpiceShared, ffi

        self.np, self.ffi = np, ffi
        self.refusals: tuple[type[Exception], ...] = (NgSpiceCommandError, NameError)
        self.ng: Any = NgSpiceShared.new_instance()
        self.log: list[str] = []

    def command(self, text: str) -> None:
        """Run one command; what it printed is added to the log and searched for errors."""
        # PySpice raises on mere notes, too: the printed lines decide.
        with contextlib.suppress(*self.refusals):
            self.ng.exec_command(text)
        self._read_messages()

    def _read_messages(self) -> None:
        """Refuse when the last call printed an error.  The next call clears the messages."""
        errors = self.ng.stderr.splitlines()
        self.log += [line for line in (*errors, *self.ng.stdout.splitlines()) if line.strip()]
        for line in errors:
            if _BAD.search(line) and not _HARMLESS.match(line.strip()):
                raise _RefusedError(line.strip())
        for line in self.ng.stdout.splitlines():
            if re.match(r"\s*(fatal )?error", line, re.IGNORECASE):
                raise _RefusedError(line.strip())

    def load(self, deck: str) -> None:
        try:
            self.ng.load_circuit(deck)
        except Exception as problem:
            self._read_messages()
            raise _RefusedError(str(problem) or "the deck was refused") from problem
        self._read_messages()

    def forget(self) -> None:
        """Free results and circuit; without this every run leaks."""
        self.command("destroy all")
        self.command("remcirc")

    def new_plots(self, before: set[str], kind: str) -> list[str]:
        """Plots of one kind that were not there before, oldest first."""
        names = [n for n in self.ng.plot_names if n not in before]
        found = [n for n in reversed(names) if re.fullmatch(rf"{kind}\d+", n)]
        if not found:
            raise _RefusedError(f"the analysis gave no {kind} result")
        return found

    def vector(self, plot: str, name: str) -> NDArray[Any]:
        """A copy of one vector, real or complex."""
        found = self.ng._ngspice_shared.ngGet_Vec_Info(f"{plot}.{name}".encode())
        if found == self.ffi.NULL or found.v_length < 1:
            raise _RefusedError(f"the result has no net {name!r}")
        length = found.v_length
        if found.v_compdata != self.ffi.NULL:
            raw = self.ffi.buffer(found.v_compdata, 16 * length)
            return self.np.frombuffer(raw, dtype=complex).copy()
        raw = self.ffi.buffer(found.v_realdata, 8 * length)
        return self.np.frombuffer(raw, dtype=float).copy()

    def run(
        self, deck: str, kind: str, scale: str, nets: Sequence[str], command: str
    ) -> dict[str, NDArray[Any]]:
        """Load a deck, run `command`, return the scale and the nets of the plot it made."""
        self.load(deck)
        before = set(self.ng.plot_names)
        self.command(command)
        plot = self.new_plots(before, kind)[0]
        return {name: self.vector(plot, name) for name in ([scale] if scale else []) + list(nets)}

    def noise(self, deck: str, net: str, command: str) -> tuple[NDArray[Any], NDArray[Any]]:
        """Frequencies and output density of a noise analysis."""
        self.run(deck, "op", "", [net], "op")  # an unknown output would read as silent
        before = set(self.ng.plot_names)
        self.command(command)
        spectrum = self.new_plots(before, "noise")[0]
        return (
            self.vector(spectrum, "frequency").real,
            self.vector(spectrum, "onoise_spectrum").real,
        )

    def alter(
        self, deck: str, command: str, net: str, changes: Sequence[Mapping[str, float]]
    ) -> NDArray[Any]:
        """The response of `net` for each set of changed values, without loading anew."""
        self.run(deck, "op", "", [net], "op")
        self.command(f"save {net}")
        rows = []
        try:
            for board in changes:
                for joined in _joined([f"alter {r.lower()} = {v!r}" for r, v in board.items()]):
                    self.command(joined)
                before = set(self.ng.plot_names)
                self.command(command)
                plot = self.new_plots(before, "ac")[0]
                rows.append(self.vector(plot, net))
                self.command(f"destroy {plot}")
                self.log.clear()
        finally:
            self.command("delete all")
        return self.np.array(rows)


def _joined(commands: Sequence[str]) -> list[str]:
    """Commands joined by semicolons into lines that are short enough."""
    lines: list[str] = []
    for command in commands:
        if lines and len(lines[-1]) + len(command) < LONGEST_COMMAND:
            lines[-1] += f"; {command}"
        else:
            lines.append(command)
    return lines


def _answer(session: _Session, request: dict[str, Any]) -> tuple[Any, ...]:
    session.log.clear()
    tasks: dict[str, Callable[..., object]] = {
        "run": session.run,
        "noise": session.noise,
        "alter": session.alter,
    }
    task = tasks[request.pop("task")]
    try:
        value = task(**request)
        session.forget()
    except _RefusedError as problem:
        return ("failed", str(problem), "\n".join(session.log))
    except MemoryError:
        return ("failed", "the simulator ran out of memory", "\n".join(session.log))
    return ("done", value)


def _watch_parent(parent: int) -> None:
    """End this process when the one that started it is gone, even in the middle of a run."""
    while os.getppid() == parent:
        time.sleep(PARENT_POLL_S)
    _remove_folder()
    os._exit(1)


def _remove_folder() -> None:
    """Remove the empty folder this process runs in, which nobody else will now."""
    with contextlib.suppress(OSError):
        Path.cwd().rmdir()


def _send(channel: BinaryIO, reply: tuple[Any, ...]) -> None:
    payload = pickle.dumps(reply, protocol=pickle.HIGHEST_PROTOCOL)
    channel.write(LENGTH.pack(len(payload)) + payload)
    channel.flush()


def _receive(channel: BinaryIO) -> dict[str, Any] | None:
    head = channel.read(LENGTH.size)
    if len(head) < LENGTH.size:
        return None
    request: dict[str, Any] = pickle.loads(channel.read(LENGTH.unpack(head)[0]))
    return request


def main(library: str, memory: int) -> None:
    """Serve requests until standard input ends."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    replies = os.fdopen(os.dup(1), "wb")
    os.dup2(2, 1)
    _, hard = resource.getrlimit(resource.RLIMIT_AS)
    limit = memory if hard == resource.RLIM_INFINITY else min(memory, hard)
    resource.setrlimit(resource.RLIMIT_AS, (limit, hard))
    resource.setrlimit(resource.RLIMIT_CORE, (0, 0))
    threading.Thread(target=_watch_parent, args=(os.getppid(),), daemon=True).start()
    try:
        session = _Session(library)
    except (OSError, ImportError, AttributeError) as problem:
        _send(replies, ("missing", str(problem).splitlines()[0], ""))
        return
    _send(replies, ("done", session.ng.ngspice_version))
    while (request := _receive(sys.stdin.buffer)) is not None:
        _send(replies, _answer(session, request))
    _remove_folder()


if __name__ == "__main__":
    main(sys.argv[1], int(sys.argv[2]))
