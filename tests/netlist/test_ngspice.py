"""The worker: results, refusals, crashes, hangs; nothing of it shows outside."""

import os
import re
import signal
import subprocess
import sys
import textwrap
import threading
import time
from pathlib import Path

import numpy as np
import pytest

from netlist.deck import board_deck, step_deck
from netlist.ngspice import Simulator
from synth.errors import (
    SimulationFailedError,
    SimulationTimeoutError,
    SimulatorMissingError,
)
from synth.grid import judging_frequencies, sweeps
from synth.transfer import Factor, TransferFunction
from tests.circuits import figures, integrator, rc, tow_thomas

SWEEP = {"start_hz": 10.0, "stop_hz": 1e6, "points_per_decade": 20}
RC = board_deck(rc(), title="rc", **SWEEP)
# ngspice 39 never ends on a sweep that is less than one step wide.
ENDLESS = RC.replace(".ac dec 20 10.0 1000000.0", ".ac dec 20 10.0 10.1")


def rc_response(frequency_hz):
    return 1 / (1 + 2j * np.pi * frequency_hz * 10e3 * 10e-9)


def test_the_response_is_complex_and_exact(simulator):
    found = simulator.ac(RC, ["in", "out"])
    np.testing.assert_allclose(found.voltages["out"], rc_response(found.frequency_hz), rtol=1e-12)
    np.testing.assert_array_equal(found.voltages["in"], 1.0)


def test_sweeps_about_a_sharp_pair_join_to_the_grid_on_which_errors_are_taken(simulator):
    """To the last bit, nothing beyond the end of a fine sweep, and the same for altered values."""
    target = TransferFunction.from_factors(1e4, [], [Factor.pair(2 * np.pi * 1e3, 3000.0)])
    whole, *further = sweeps(target, (10.0, 1e4))
    assert len(further) == 2
    deck = board_deck(
        rc(), title="t", start_hz=10.0, stop_hz=1e4, points_per_decade=whole.points_per_decade,
        further=further,
    )  # fmt: skip
    found = simulator.ac(deck, ["out"])
    np.testing.assert_array_equal(found.frequency_hz, judging_frequencies(target, (10.0, 1e4)))
    np.testing.assert_allclose(found.voltages["out"], rc_response(found.frequency_hz), rtol=1e-12)
    (altered,) = simulator.alter_ac(deck, [{"R1": 20e3}], "out")
    np.testing.assert_allclose(altered, rc_response(2 * found.frequency_hz), rtol=1e-12)


def test_the_operating_point_of_a_biased_circuit(simulator):
    """A divider of 10 k and 30 k at 4 V; another source than that of the decks."""
    deck = "* t\nVin in 0 DC 4 AC 1\nR1 in out 10000.0\nR2 out 0 30000.0\n.end\n"
    assert simulator.operating_point(deck, ["in", "out"]) == pytest.approx(
        {"in": 4.0, "out": 3.0}, rel=1e-9
    )


def test_a_step_into_a_resistor_and_a_capacitor(simulator):
    deck = step_deck(rc(), title="t", supply=(-12, 12), step_volts=2.0, stop_s=1e-3)
    found = simulator.transient(deck, ["in", "out"])
    after = np.maximum(found.time_s - (20e-6 + 50e-9), 0.0)
    np.testing.assert_allclose(
        found.voltages["out"], -2.0 * np.expm1(-after / 100e-6), rtol=0, atol=4e-3
    )
    assert found.time_s[0] == 0.0
    assert found.time_s[-1] == pytest.approx(1e-3)


def test_ngspice_as_a_command_gives_the_same_response(simulator, tmp_path):
    """The text that `ngspice -n -b` prints for the deck, as a user would run it."""
    deck = board_deck(tow_thomas(figures()), title="t", **SWEEP)
    found = simulator.ac(deck, ["out"])
    (tmp_path / "board.cir").write_text(deck)
    done = subprocess.run(
        ["ngspice", "-n", "-b", "board.cir"],
        cwd=tmp_path,
        capture_output=True,
        text=True,
        check=True,
    )
    rows = [line.split() for line in done.stdout.splitlines()]
    table = np.array([[float(x) for x in r[1:]] for r in rows if len(r) == 4 and r[0].isdigit()])
    assert table.shape == (found.frequency_hz.size, 3)
    np.testing.assert_allclose(table[:, 0], found.frequency_hz, rtol=1e-6)
    printed = 10 ** (table[:, 1] / 20) * np.exp(1j * table[:, 2])
    np.testing.assert_allclose(printed, found.voltages["out"], rtol=1e-5)
    assert "out" in done.stdout
    assert "rror" not in done.stdout + done.stderr
    assert "arning" not in done.stdout + done.stderr


def test_altering_parts_is_the_same_as_loading_each_board(simulator):
    circuit = tow_thomas(figures())
    boards = [{"R1": 9e3, "C2": 2e-9}, {"R1": 11e3}, {"R1": 10e3, "C2": 1.59e-9, "R6": 12e3}]
    deck = board_deck(circuit, title="t", **SWEEP)
    altered = simulator.alter_ac(deck, boards, "out")
    assert altered.shape == (3, simulator.ac(deck, ["out"]).frequency_hz.size)
    for row, board in zip(altered, boards, strict=True):
        circuit = circuit.with_values(board)
        alone = simulator.ac(board_deck(circuit, title="t", **SWEEP), ["out"])
        np.testing.assert_allclose(row, alone.voltages["out"], rtol=1e-9)
    np.testing.assert_allclose(
        simulator.alter_ac(deck, [{}], "out")[0], simulator.ac(deck, ["out"]).voltages["out"]
    )


@pytest.mark.parametrize(
    ("line", "told"),
    [
        ("Xbad in out nosuch", "nosuch"),
        ("R1 in out 5.0", "r1|already|duplicate"),
        ("Dx in out nomodel", "nomodel|model"),
        ("R9 in out abc", "abc"),
        ("R9 in out {undefined_parameter}", "undefined"),
    ],
)
def test_a_bad_deck_fails_with_what_ngspice_said_and_the_next_one_works(simulator, line, told):
    bad = RC.replace(".ac dec", f"{line}\n.ac dec")
    with pytest.raises(SimulationFailedError, match="ngspice failed") as caught:
        simulator.ac(bad, ["out"])
    assert "\n" not in str(caught.value)
    assert re.search(told, f"{caught.value} {caught.value.log}", re.IGNORECASE)
    assert simulator.ac(RC, ["out"]).voltages["out"].size == 101


def test_a_net_that_is_not_there_is_an_error_not_zero(simulator):
    for ask in (
        lambda: simulator.ac(RC, ["nowhere"]),
        lambda: simulator.operating_point(RC, ["nowhere"]),
        lambda: simulator.noise(RC, "nowhere", 10.0, 1e3, 10),
        lambda: simulator.alter_ac(RC, [{"R1": 1.0}], "nowhere"),
    ):
        with pytest.raises(SimulationFailedError, match="nowhere"):
            ask()


def test_a_part_that_is_not_there_cannot_be_altered(simulator):
    with pytest.raises(SimulationFailedError, match="no part 'R7'"):
        simulator.alter_ac(RC, [{"R7": 1.0}], "out")


@pytest.mark.parametrize(
    "line", [".control", "*# shell ls", ".include /etc/passwd", ".LIB x", " .control", "\u2028.op"]
)
def test_a_deck_with_commands_is_refused_before_it_is_sent(simulator, line):
    with pytest.raises(SimulationFailedError, match=r"not allowed|beyond ASCII"):
        simulator.ac(RC.replace(".op", line), ["out"])


def test_a_singular_circuit_fails(simulator):
    """Two sources in parallel that disagree."""
    deck = "* t\nVin in 0 DC 1 AC 1\nVx in 0 DC 2\nR1 in 0 1.0\n.ac dec 10 1.0 10.0\n.end\n"
    with pytest.raises(SimulationFailedError, match="ngspice failed"):
        simulator.operating_point(deck, ["in"])


@pytest.mark.parametrize("library", ["/nowhere/libngspice.so.0", "libm.so.6"])
def test_a_missing_library_says_what_to_install(library):
    with Simulator(library=library) as broken:
        for _ in range(2):
            with pytest.raises(SimulatorMissingError, match="install libngspice0"):
                broken.ac(RC, ["out"])


def test_no_library_at_all_says_what_to_install(monkeypatch):
    monkeypatch.setattr("ctypes.util.find_library", lambda name: None)
    with pytest.raises(SimulatorMissingError, match="install libngspice0"):
        Simulator()


def test_a_hang_ends_at_the_time_limit_and_the_next_call_works():
    with Simulator(time_limit=1.0) as limited:
        limited.ac(RC, ["out"])
        first = limited.process_id
        begun = time.monotonic()
        with pytest.raises(SimulationTimeoutError, match="time limit of 1 s"):
            limited.ac(ENDLESS, ["out"])
        assert 0.9 < time.monotonic() - begun < 5.0
        assert limited.ac(RC, ["out"]).voltages["out"].size == 101
        assert limited.process_id != first
        assert not is_running(first)


@pytest.mark.parametrize("how", [signal.SIGSEGV, signal.SIGKILL])
def test_a_crash_between_calls_is_reported_and_the_next_call_works(how):
    with Simulator() as running:
        running.ac(RC, ["out"])
        os.kill(running.process_id, how)
        with pytest.raises(SimulationFailedError, match=f"signal {int(how)}"):
            running.ac(RC, ["out"])
        assert running.ac(RC, ["out"]).voltages["out"].size == 101


def test_a_crash_in_the_middle_of_a_run_is_reported():
    with Simulator(time_limit=30.0) as running:
        running.ac(RC, ["out"])
        threading.Timer(0.3, os.kill, (running.process_id, signal.SIGSEGV)).start()
        with pytest.raises(SimulationFailedError, match="in the middle of its work"):
            running.ac(ENDLESS, ["out"])
        assert running.ac(RC, ["out"]).voltages["out"].size == 101


def test_the_worker_ignores_an_interrupt_from_the_keyboard():
    with Simulator() as running:
        running.ac(RC, ["out"])
        before = running.process_id
        os.kill(before, signal.SIGINT)
        assert running.ac(RC, ["out"]).voltages["out"].size == 101
        assert running.process_id == before


def test_too_little_memory_is_a_failure_of_the_simulator():
    with Simulator(memory_limit=200 << 20) as small:
        deck = RC.replace("dec 20 10.0", "dec 2000000 10.0")
        with pytest.raises((SimulationFailedError, SimulatorMissingError)):
            small.ac(deck, ["out"])


def test_closing_ends_the_worker_and_removes_its_folder():
    running = Simulator()
    running.ac(RC, ["out"])
    process = running.process_id
    folder = Path(f"/proc/{process}/cwd").resolve()
    assert folder.is_dir()
    assert list(folder.iterdir()) == []
    running.close()
    running.close()
    assert not is_running(process)
    assert not folder.exists()
    with pytest.raises(SimulationFailedError, match="was closed"):
        running.ac(RC, ["out"])


def test_memory_stays_flat_over_two_hundred_runs(simulator):
    """Without removing circuits 200 runs of this deck leak about 100 MB, with `destroy` alone
    10 MB."""
    deck = board_deck(tow_thomas(figures()), title="t", **SWEEP)
    step = step_deck(integrator(figures()), title="t", supply=(-9, 9), step_volts=1, stop_s=1e-4)

    def resident() -> int:
        pages = Path(f"/proc/{simulator.process_id}/statm").read_text().split()[1]
        return int(pages) * os.sysconf("SC_PAGE_SIZE")

    def cycle() -> None:
        simulator.ac(deck, ["out"])
        simulator.noise(deck, "out", 10.0, 1e5, 20)
        simulator.transient(step, ["out"])

    for _ in range(40):
        cycle()
    before = resident()
    for _ in range(200):
        cycle()
    assert resident() - before < 3_000_000


def run_script(text: str, folder: Path) -> subprocess.CompletedProcess:
    script = folder / "script.py"
    script.write_text(textwrap.dedent(text))
    (folder / "board.cir").write_text(RC)
    (folder / "endless.cir").write_text(ENDLESS)
    return subprocess.run(
        [sys.executable, str(script)], cwd=folder, capture_output=True, text=True, check=False
    )


def test_a_plain_script_can_use_it_and_nothing_is_printed(tmp_path):
    """No guard against being imported again, a .spiceinit in the folder, a bad deck."""
    (tmp_path / ".spiceinit").write_text("shell touch marker\necho printed by spiceinit\n")
    done = run_script(
        """
        from netlist.ngspice import Simulator
        from synth.errors import SimulationFailedError
        with Simulator() as simulator:
            deck = open("board.cir").read()
            print(simulator.ac(deck, ["out"]).voltages["out"].size)
            try:
                simulator.ac(deck.replace("R1 in", "Xbad in"), ["out"])
            except SimulationFailedError:
                print("refused")
        """,
        tmp_path,
    )
    assert (done.stdout, done.stderr, done.returncode) == ("101\nrefused\n", "", 0)
    assert not (tmp_path / "marker").exists()


def test_the_worker_ends_when_its_program_is_killed_in_the_middle_of_a_run(tmp_path):
    done = run_script(
        """
        import os, signal, threading
        from netlist.ngspice import Simulator
        simulator = Simulator()
        simulator.ac(open("board.cir").read(), ["out"])
        process = simulator.process_id
        print(process, os.readlink(f"/proc/{process}/cwd"), flush=True)
        threading.Timer(0.2, os.kill, (os.getpid(), signal.SIGKILL)).start()
        simulator.ac(open("endless.cir").read(), ["out"])
        """,
        tmp_path,
    )
    assert done.returncode == -signal.SIGKILL
    process, folder = done.stdout.split()
    deadline = time.monotonic() + 10.0
    while is_running(int(process)) and time.monotonic() < deadline:
        time.sleep(0.05)
    assert not is_running(int(process))
    assert not Path(folder).exists()


def test_an_interrupt_ends_the_program_and_its_worker(tmp_path):
    done = run_script(
        """
        import os, signal, threading
        from netlist.ngspice import Simulator
        with Simulator() as simulator:
            simulator.ac(open("board.cir").read(), ["out"])
            print(simulator.process_id, flush=True)
            threading.Timer(0.2, os.kill, (os.getpid(), signal.SIGINT)).start()
            simulator.ac(open("endless.cir").read(), ["out"])
        """,
        tmp_path,
    )
    assert "KeyboardInterrupt" in done.stderr
    assert not is_running(int(done.stdout))


def is_running(process: int) -> bool:
    """Whether a process lives, zombies left aside."""
    try:
        state = Path(f"/proc/{process}/stat").read_text().rpartition(")")[2].split()[0]
    except OSError:
        return False
    return state != "Z"
