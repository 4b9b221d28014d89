"""Decks: what each line says, and that no text can make a deck do more than simulate."""

import re
import subprocess
from dataclasses import replace

import pytest

from netlist.deck import board_deck, filtered, step_deck
from synth.circuit import Circuit
from synth.errors import CircuitError
from tests.circuits import amplifier, figures, part, rc, tow_thomas

SWEEP = {"start_hz": 10.0, "stop_hz": 1e5, "points_per_decade": 20}
STEP = {"supply": (-12.0, 12.0), "step_volts": 1.0, "stop_s": 1e-3}
HOSTILE = (
    "x\n.control\nshell touch marker\n.endc\n*",
    "x\r.control\rshell touch marker\r.endc\r*",
    "*# shell touch marker",
    "# shell touch marker",
    "x\n*# shell touch marker",
    *(f"x{c}.control{c}shell touch marker{c}.endc{c}*" for c in "\v\f\x1c\x1d\x1e\x85\u2028\u2029"),
    "$(touch marker) `touch marker` ; shell touch marker",
    "x\n.include /etc/passwd\n",
    "ends with a continuation \\\\",
    "x\x00y\x1b[2J",
)


def both(circuit: Circuit, title: str = "t") -> tuple[str, str]:
    return board_deck(circuit, title=title, **SWEEP), step_deck(circuit, title=title, **STEP)


def test_every_passive_is_one_top_level_line_with_a_plain_number():
    deck, _ = both(tow_thomas(figures()))
    top = re.sub(r"\.subckt.*?\.ends[^\n]*", "", deck, flags=re.S).splitlines()
    for line in ("R1 in x1_s 10000.0", "C1 x1_s x1 1.59e-09", "R6 out_ns out_n 10000.0"):
        assert top.count(line) == 1
    assert "Vin in 0 DC 0 AC 1" in top
    assert "XU2 0 out_s out opamp_1" in top
    assert top[0] == "* t"


def test_no_element_inside_a_subcircuit_can_be_a_reference_of_a_board():
    """References have at most 16 characters; names inside have more, and none occurs twice."""
    for deck in both(tow_thomas(figures())):
        inside = re.search(r"\.subckt.*?\n(.*?)\.ends", deck, flags=re.S).group(1)
        names = [line.split()[0] for line in inside.splitlines() if not line.startswith("*")]
        assert len(names) >= 4
        assert all(len(name) > 16 for name in names)
        assert len({name.lower() for name in names}) == len(names)


def test_one_subcircuit_for_each_distinct_set_of_figures():
    slow = tow_thomas(figures(gain_bandwidth=1e6))
    mixed = replace(slow, amplifiers=(*tow_thomas(figures()).amplifiers[:2], slow.amplifiers[2]))
    deck, _ = both(mixed)
    assert deck.count(".subckt") == 2
    assert "XU1 0 x1_s x1 opamp_1" in deck
    assert "XU3 0 out_ns out_n opamp_2" in deck


def test_what_a_part_sets_is_told_in_a_comment_above_it():
    told = replace(rc(), passives=(part("R1", "in out", 1e3, "time\nconstant"), *rc().passives[1:]))
    deck, _ = both(told)
    assert "\n* R1: timeconstant\nR1 in out 1000.0\n" in deck


def test_the_same_circuit_gives_the_same_text():
    assert both(tow_thomas(figures())) == both(tow_thomas(figures()))


def test_filtered_text_is_one_line_of_printable_ascii():
    assert filtered("  Ä servo \t\u2028 10 kΩ \\\\ #1 ") == "servo 10 k #1"
    assert len(filtered("x" * 1000)) == 120


@pytest.mark.parametrize("title", HOSTILE)
def test_a_hostile_title_adds_no_line(title):
    for plain, hostile in zip(both(rc()), both(rc(), title), strict=True):
        assert hostile.splitlines()[1:] == plain.splitlines()[1:]
        assert hostile.startswith("* ")
        assert hostile.isascii()
        assert not re.search(r"[\x00-\x09\x0b-\x1f\x7f]", hostile)


def test_ngspice_runs_nothing_a_title_says(tmp_path):
    """The same commands do run when they stand in a deck unfiltered."""
    for number, title in enumerate(HOSTILE):
        for deck in both(rc(), title):
            run(deck, tmp_path, f"{number}.cir")
            assert not (tmp_path / "marker").exists()
    run("* t\n.control\nshell touch marker\n.endc\n.end\n", tmp_path, "raw.cir")
    assert (tmp_path / "marker").exists()


def test_the_worker_runs_nothing_a_title_says(simulator, tmp_path):
    for title in HOSTILE:
        told = title.replace("marker", str(tmp_path / "marker"))
        response = simulator.ac(both(rc(), told)[0], ["out"])
        assert response.voltages["out"].size == 81
    assert not (tmp_path / "marker").exists()


def run(deck: str, folder, name: str) -> str:
    """Run a deck as a user would; what it prints."""
    (folder / name).write_text(deck)
    done = subprocess.run(
        ["ngspice", "-n", "-b", name],
        cwd=folder,
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )
    assert "rror" not in done.stdout + done.stderr
    return done.stdout


def test_names_that_spice_reads_otherwise_are_refused():
    with pytest.raises(CircuitError, match="net name 'gnd'"):
        both(
            Circuit(passives=(part("R1", "in gnd", 1.0), part("R2", "gnd out", 1.0)), amplifiers=())
        )
    odd = replace(part("R1", "in out", 1.0), ref="Q1")
    with pytest.raises(CircuitError, match="'Q1' for a resistor, expected one that starts with R"):
        both(Circuit(passives=(odd, part("R2", "out 0", 1.0)), amplifiers=()))


@pytest.mark.parametrize(
    "sweep", [(10.0, 10.2, 50), (10.0, 10.0, 50), (100.0, 10.0, 50), (0.0, 1.0, 50)]
)
def test_a_sweep_on_which_the_simulator_would_never_end_is_refused(sweep):
    start, stop, density = sweep
    with pytest.raises(CircuitError, match="expected"):
        board_deck(rc(), title="", start_hz=start, stop_hz=stop, points_per_decade=density)


@pytest.mark.parametrize(
    "wrong",
    [{"stop_s": 0.0}, {"delay_s": 2e-3}, {"edge_s": -1.0}, {"step_volts": float("nan")}],
)
def test_a_step_with_times_out_of_order_is_refused(wrong):
    with pytest.raises(CircuitError, match="expected"):
        step_deck(rc(), title="", **{**STEP, **wrong})


def test_an_amplifier_named_like_a_resistor_stays_an_amplifier():
    circuit = Circuit(
        passives=(part("R1", "in out_s", 1e3), part("R2", "out_s out", 1e3)),
        amplifiers=(amplifier("R3", "0 out_s out", figures()),),
    )
    assert "\nXR3 0 out_s out opamp_1\n" in both(circuit)[0]
