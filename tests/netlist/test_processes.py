"""Work in processes comes back in order, and the processes end with the work."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from netlist.cli.running import TERMINATED, run
from netlist.processes import workers


def square(x: int) -> int:
    return x * x


def fail(x: int) -> int:
    raise ValueError(f"got {x}")


def test_results_come_in_the_order_of_the_arguments() -> None:
    with workers() as mapper:
        assert list(mapper(square, range(6))) == [0, 1, 4, 9, 16, 25]


def test_a_failure_inside_is_a_failure_outside() -> None:
    with pytest.raises(ValueError, match="got 3"), workers() as mapper:
        list(mapper(fail, [3]))


def test_processes_end_when_the_command_is_killed(tmp_path) -> None:
    """Not even the interpreter that started them has a chance to say goodbye."""
    script = tmp_path / "long.py"
    script.write_text(
        "import os, sys, time\n"
        "from netlist.processes import workers\n"
        "def wait(x):\n"
        "    print(os.getpid(), flush=True)\n"
        "    time.sleep(60)\n"
        "if __name__ == '__main__':\n"
        "    with workers() as mapper:\n"
        "        list(mapper(wait, [1, 2]))\n"
    )
    path = os.pathsep.join(p for p in sys.path if p)
    with subprocess.Popen(
        [sys.executable, str(script)],
        stdout=subprocess.PIPE,
        text=True,
        env={**os.environ, "PYTHONPATH": path},
    ) as process:
        assert process.stdout is not None
        inner = int(process.stdout.readline())
        assert inner != process.pid
        process.send_signal(signal.SIGKILL)
        process.wait()
    for _ in range(100):
        if not Path(f"/proc/{inner}").exists():
            break
        time.sleep(0.05)
    else:
        pytest.fail("a process outlived the command that started it")


def test_a_command_that_is_terminated_ends_in_order(tmp_path) -> None:
    """Like an interrupt: no process, no temporary folder and no complaint of a library is left, and
    the exit code is that of shells, 128 and 15."""
    script = tmp_path / "command.py"
    script.write_text(
        "import os, sys, time\n"
        "from netlist.cli import running\n"
        "from netlist.ngspice import Simulator\n"
        "from netlist.processes import workers\n"
        "def wait(x):\n"
        "    print(os.getpid(), flush=True)\n"
        "    time.sleep(60)\n"
        "def work(command, arguments):\n"
        "    with Simulator(), workers() as mapper:\n"
        "        list(mapper(wait, [1, 2]))\n"
        "if __name__ == '__main__':\n"
        "    running._attempt = work\n"
        "    sys.exit(running.run([]))\n"
    )
    temporary = tmp_path / "temporary"
    temporary.mkdir()
    path = os.pathsep.join(p for p in sys.path if p)
    with subprocess.Popen(
        [sys.executable, str(script)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        env={**os.environ, "PYTHONPATH": path, "TMPDIR": str(temporary)},
    ) as process:
        assert process.stdout is not None
        inner = int(process.stdout.readline())
        assert list(temporary.iterdir())
        process.send_signal(signal.SIGTERM)
        _, complaints = process.communicate(timeout=30)
    assert process.returncode == TERMINATED == 143
    assert complaints == "polewright: terminated\n"
    assert list(temporary.iterdir()) == []
    assert not Path(f"/proc/{inner}").exists()


def test_the_handler_is_gone_after_the_command() -> None:
    before = signal.getsignal(signal.SIGTERM)
    assert run(["--version"]) == 0
    assert signal.getsignal(signal.SIGTERM) == before
