"""The shipped scenarios, whole: every stage, every form, ngspice in its worker and as a command."""

from __future__ import annotations

import csv
import json
import os
import re
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from netlist import design, read_job, verify
from netlist.schematic.drawing import compose
from netlist.stimulus import decks_of
from netlist.verification import disagreement
from synth.errors import RealizationError
from synth.forms import FORMS
from synth.nodal import compile_circuit
from tests.netlist.schematic.drawn import collisions, overlapping_wires

FOLDER = Path(__file__).resolve().parents[2] / "scenarios"
SCENARIOS = sorted(path.stem for path in FOLDER.glob("*.toml"))

KEYS = {"format", "title", "form", "inverted", "target", "components", "checks", "verdict"}
COMPONENT_KEYS = {
    "ref",
    "kind",
    "value",
    "ideal",
    "series",
    "tolerance",
    "fixed",
    "nets",
    "sets",
}
# Of what `ngspice -b` prints: seven digits.
PRINTED = 2e-6


def run_ngspice(deck: str, folder: Path) -> list[list[float]]:
    """Run a deck as a user does, in an empty folder; the rows of the tables it prints."""
    (folder / "deck.cir").write_text(deck, encoding="ascii")
    done = subprocess.run(
        ["ngspice", "-n", "-b", "deck.cir"],
        cwd=folder,
        capture_output=True,
        text=True,
        timeout=60,
        check=True,
    )
    assert "rror" not in done.stdout + done.stderr
    assert "arning" not in done.stdout + done.stderr
    rows = [line.split() for line in done.stdout.splitlines() if re.match(r"\d+\t", line)]
    return [[float(x) for x in row[1:]] for row in rows]


def top_level(deck: str) -> list[str]:
    """The lines outside subcircuits that are no comments."""
    plain = re.sub(r"^\.subckt.*?^\.ends[^\n]*\n", "", deck, flags=re.S | re.M)
    return [line for line in plain.splitlines() if not line.startswith("*")]


def refuse(name):
    raise AssertionError(f"{name} is not JSON")


def test_there_are_at_least_four():
    assert len(SCENARIOS) >= 4


@pytest.mark.parametrize("form", FORMS)
@pytest.mark.parametrize("scenario", SCENARIOS)
def test_ngspice_accepts_every_form_and_agrees_at_every_net(scenario, form, simulator):
    """Magnitude, phase, settling, swing, slew and current within their limits; noise within half
    a percent of ngspice; the nodal engine within 1e-6 of it at every op-amp output, down to a
    millionth of its largest voltage; nothing overlaps in the schematic."""
    job = read_job(FOLDER / f"{scenario}.toml")
    try:
        made = design(replace(job, board=replace(job.board, form=form)), boards=20, effort=0.1)
    except RealizationError:
        if FORMS[form].everywhere:
            raise
        pytest.skip(f"no {form} form of this scenario")
    checked = verify(made, simulator=simulator)
    assert checked.failure is None
    assert checked.nodal_disagreement < 1e-6
    assert checked.noise_rms == pytest.approx(made.noise.output_rms, rel=5e-3)
    missed = [c for c in (*checked.checks, *made.checks) if not c.passed and c.name != "yield"]
    # What a drawer holds need not do for a form whose zeros are sums that cancel.
    if FORMS[form].structural_zeros or not job.board.resistors.stock:
        assert missed == []
    nets = list(made.circuit.signal_nets())
    simulated = simulator.ac(decks_of(made).board, nets)
    found = compile_circuit(made.circuit).solve(simulated.frequency_hz, nets=nets)
    for k, net in enumerate(nets):
        assert disagreement(found[:, k], simulated.voltages[net]) < 1e-6, net
    sheet = compose(made.circuit, title=job.title, supply=job.board.supply, subtitle=form).sheet
    assert collisions(sheet) == []
    assert overlapping_wires(sheet) == []


def command(scenario: str, folder: Path, **environment: str) -> str:
    """Run `polewright design` in a process of its own; its standard output."""
    job = str(FOLDER / f"{scenario}.toml")
    done = subprocess.run(
        [sys.executable, "-m", "netlist.cli", "design", job, "--into", str(folder), "--json"],
        capture_output=True,
        text=True,
        check=False,
        env={**os.environ, **environment},
    )
    assert done.returncode == 0, done.stderr
    return done.stdout


def contents(folder: Path) -> dict[str, bytes]:
    """Every file of a folder."""
    return {p.name: p.read_bytes() for p in folder.iterdir()}


@pytest.mark.parametrize("scenario", SCENARIOS)
def test_a_scenario_meets_its_limits_and_its_pack_is_what_scripts_rely_on(scenario, tmp_path):
    printed = command(scenario, tmp_path / "pack")
    files = contents(tmp_path / "pack")
    assert printed == files["design.json"].decode()
    record = json.loads(printed, parse_constant=refuse)
    check_record(record)
    assert record["verdict"] == "pass"
    # Another seed would pass as well: the whole interval lies above the limit.
    limit = next(c["limit"] for c in record["checks"] if c["name"] == "yield")
    assert 100 * record["yield"]["low"] > limit
    check_decks(record, files)
    check_response(record, files, tmp_path)


def test_neither_hashes_nor_threads_change_a_byte(tmp_path):
    """The order of sets follows the hashes, the last digit of a matrix product the threads."""
    for name, hashes, threads in (("one", "7", "1"), ("two", "8", "2")):
        command(
            "spare_gauge_drawer",
            tmp_path / name,
            PYTHONHASHSEED=hashes,
            OPENBLAS_NUM_THREADS=threads,
        )
    one, two = contents(tmp_path / "one"), contents(tmp_path / "two")
    assert one.keys() == two.keys()
    assert [name for name in one if one[name] != two[name]] == []


def check_record(record) -> None:
    """The fields and the names of checks that scripts rely on."""
    assert record.keys() >= KEYS
    assert record["format"] == 1
    for part in record["components"]:
        assert part.keys() == COMPONENT_KEYS
        assert part["kind"] in {"resistor", "capacitor", "op_amp"}
        assert (part["value"] is None) == (part["kind"] == "op_amp")
    names = [c["name"] for c in record["checks"]]
    assert len(set(names)) == len(names)
    assert [n for n in names if "error" in n] == ["magnitude error", "phase error"]
    for check in record["checks"]:
        assert check.keys() >= {"name", "limit", "value", "unit", "passed"}
        assert check["limit"] is not None or check["passed"] is True
        assert isinstance(check["passed"], bool)


def check_decks(record, files) -> None:
    """One top-level line for each part and none besides, in both decks; the source; no name of
    a part inside a subcircuit."""
    passives = [c for c in record["components"] if c["kind"] != "op_amp"]
    passives += record["surroundings"]
    expected = {f"{c['ref']} {' '.join(c['nets'])} {c['value']!r}" for c in passives}
    for name in ("board.cir", "step.cir"):
        deck = files[name].decode("ascii")
        lines = top_level(deck)
        assert {line for line in lines if line[0] in "RC"} == expected
        assert sum(line[0] in "RC" for line in lines) == len(expected)
        assert sum(line[0] == "X" for line in lines) == sum(
            c["kind"] == "op_amp" for c in record["components"]
        )
        inside = re.findall(r"^([A-Z]\w*) ", "\n".join(set(deck.splitlines()) - set(lines)), re.M)
        assert inside
        assert {n.upper() for n in inside}.isdisjoint(c["ref"] for c in record["components"])
    source = [x for x in files["board.cir"].decode().splitlines() if x.startswith("V")]
    assert source == ["Vin in 0 DC 0 AC 1"]


def check_response(record, files, folder: Path) -> None:
    """``ngspice -b`` on the decks gives the response and the noise that the pack claims."""
    table = list(csv.DictReader(files["response.csv"].decode().splitlines()))
    frequency, db, deg = (
        np.array([float(row[key]) for row in table])
        for key in ("frequency_hz", "simulated_db", "simulated_deg")
    )
    claimed = 10 ** (db / 20) * np.exp(1j * np.radians(deg))
    deck = files["board.cir"].decode()
    low, high = record["noise"]["band_hz"]
    per_decade = re.search(r"^\.ac dec (\d+) ", deck, re.M)[1]
    swept = np.array([r for r in run_ngspice(deck, folder) if len(r) == 3])
    np.testing.assert_allclose(swept[:, 0], frequency, rtol=PRINTED)
    shown = 10 ** (swept[:, 1] / 20) * np.exp(1j * swept[:, 2])
    np.testing.assert_allclose(shown, claimed, rtol=10 * PRINTED)
    error = np.max(np.abs([float(row["error_db"]) for row in table]))
    assert record["checks"][0]["value"] == pytest.approx(error, rel=1e-9)
    noise = f"noise v(out) vin dec {per_decade} {low} {2 * high}\nsetplot noise1\nprint"
    with_noise = deck.replace(".op\n", f".control\n{noise} onoise_spectrum\n.endc\n")
    f, density = np.array([r for r in run_ngspice(with_noise, folder) if len(r) == 2]).T
    inside = np.append(f[f < high], high)
    total = np.sqrt(np.trapezoid(np.interp(inside, f, density) ** 2, inside))
    assert total == pytest.approx(record["noise"]["output_rms_v"], rel=1e-3)
    assert record["simulation"]["noise_rms_v"] == pytest.approx(
        record["noise"]["output_rms_v"], rel=1e-3
    )
    step = np.array(run_ngspice(files["step.cir"].decode(), folder))
    assert step.shape[0] > 500 and step.shape[1] == 3
    limit = record["supply"][1] - record["op_amp"]["swing_headroom"]
    assert np.max(np.abs(step[:, 2])) <= limit + 0.01
