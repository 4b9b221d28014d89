"""The population of the boards: from the keys of a job to the report, and every mistake told."""

from __future__ import annotations

import json

import pytest

from netlist.cli.running import run
from netlist.jobfile import parse_job
from netlist.report.boards import assumptions, left_out
from synth.errors import JobError
from synth.population import Network, PartSpread, Population

JOB = """
[target]
numerator = [5000]
denominator = [1, 5000]
[signal]
band = ["10 Hz", "2 kHz"]
[board]
form = "cascade"
"""
FULL = """
temperature = ["-10 degC", "60 °C"]
[board.resistors]
series = "E24"
distribution = "normal"
temperature_coefficient = "50 ppm/K"
[board.capacitors]
lot = "50 %"
[board.op_amp]
kind = "precision"
gain_bandwidth_spread = "40 %"
[[board.networks]]
refs = ["R1", "R2"]
tolerance = "0.1 %"
tracking = "5 ppm/K"
"""


def refusal(text: str) -> str:
    with pytest.raises(JobError) as caught:
        parse_job(JOB + text, name="bad.toml")
    return str(caught.value)


def test_keys_reach_the_population_and_the_parts_are_as_they_were() -> None:
    board = parse_job(JOB + FULL).board
    assert board.population == Population(
        resistors=PartSpread(distribution="normal", temperature_coefficient=50e-6),
        capacitors=PartSpread(lot=0.5),
        networks=(Network(refs=("R1", "R2"), tolerance=0.001, tracking=5e-6),),
        temperature=(-10.0, 60.0),
        gain_bandwidth_spread=0.4,
    )
    assert (board.resistors.series, board.op_amp.kind) == ("E24", "precision")
    assert parse_job(JOB).board.population.is_plain


NETWORK = '[[board.networks]]\nrefs = {}\ntolerance = "0.1 %"\n'


@pytest.mark.parametrize(
    ("text", "message"),
    [
        (
            '[board.resistors]\ndistribution = "gauss"',
            ":10: board.resistors.distribution: got 'gauss', expected 'uniform' or 'normal'",
        ),
        (
            '[board.capacitors]\nlot = "120 %"',
            ":10: board.capacitors.lot: got 120 %, expected a share from 0 to 100 % of the "
            "tolerance",
        ),
        (
            '[board.capacitors]\ntemperature_coefficient = "30 ppm"',
            ":10: board.capacitors.temperature_coefficient: got '30 ppm', expected a temperature "
            "coefficient such as '50 ppm/K'",
        ),
        (
            '[board.resistors]\ntemperature_coefficient = "30 ppm/K"',
            ":10: board.resistors.temperature_coefficient: got a temperature coefficient without "
            "temperatures, expected them as board.temperature, such as ['0 degC', '60 degC']",
        ),
        (
            'temperature = "25 degC"',
            ":9: board.temperature: got '25 degC', expected the lowest and the highest temperature "
            "such as ['0 degC', '60 degC']",
        ),
        (
            'temperature = ["0 degC", "60 K"]',
            ":9: board.temperature: got '60 K', expected a temperature such as '25 degC'",
        ),
        (
            '[board.op_amp]\ngain_bandwidth_spread = "100 %"',
            ":10: board.op_amp.gain_bandwidth_spread: got 100 %, expected 0 to below 100 %",
        ),
        (
            NETWORK.format('["R1"]'),
            ":10: board.networks[1].refs: got R1, expected two or more parts that are matched to "
            "each other",
        ),
        (
            NETWORK.format('["R1", "R2"]') + NETWORK.format('["R3", "R2"]'),
            ":13: board.networks[2].refs: got R2, which is in network 1 too, expected each part in "
            "one network",
        ),
        (
            NETWORK.format('["R1", "R2"]') + '[[board.networks]]\nrefs = ["R3", "R4"]',
            ":12: board.networks[2].tolerance: is missing, expected the tolerance of the ratio of "
            "any two of the parts, such as '0.1 %'",
        ),
        (
            NETWORK.format('["R1", "R2"]') + 'trackin = "5 ppm/K"',
            ":12: board.networks[1].trackin: unknown key 'trackin'; did you mean 'tracking'?",
        ),
        (
            NETWORK.format('"R1"'),
            ":10: board.networks[1].refs: got 'R1', expected a list of references such as "
            "['R3', 'R4']",
        ),
        ("networks = 3", ":9: board.networks: got 3, expected a table [[board.networks]]"),
        ("networks = [3]", ":9: board.networks[1]: got 3, expected a table [[board.networks]]"),
    ],
)
def test_every_mistake_is_one_clear_message(text, message) -> None:
    assert refusal(text) == f"bad.toml{message}"


def test_several_mistakes_are_told_at_once() -> None:
    told = refusal('[board.resistors]\nlot = "120 %"\n' + NETWORK.format('["R1", "R1"]'))
    assert [line.partition(" got ")[0] for line in told.splitlines()] == [
        "bad.toml:10: board.resistors.lot:",
        "bad.toml:12: board.networks[1].refs:",
    ]


def test_a_network_of_a_part_that_the_form_does_not_have_ends_with_2(
    tmp_path, monkeypatch, capsys
) -> None:
    monkeypatch.chdir(tmp_path)
    (tmp_path / "job.toml").write_text(JOB + NETWORK.format('["R1", "R9"]'), encoding="utf-8")
    assert run(["design", "job.toml"]) == 2
    said = capsys.readouterr()
    assert said.out == ""
    assert (
        "board.networks[1].refs: got R9, a reference that does not exist in this form" in said.err
    )
    assert "expected R1 to R" in said.err
    assert not (tmp_path / "job").exists()


def test_the_pack_says_what_fails_first_and_what_drives_it(tmp_path, monkeypatch, capsys) -> None:
    monkeypatch.chdir(tmp_path)
    text = JOB + FULL + '[accept]\nmagnitude = "0.15 dB"\n'
    (tmp_path / "job.toml").write_text(text, encoding="utf-8")
    assert run(["design", "job.toml", "--boards", "600", "--json"]) in (0, 1, 3)
    found = json.loads(capsys.readouterr().out)["yield"]
    assert found["failures"]["boards"] == 600 - found["passed"] > 0
    assert found["failures"]["first"][0]["quantity"] == "magnitude"
    assert sum(f["boards"] for f in found["failures"]["first"]) == found["failures"]["boards"]
    assert found["drivers"][0]["refs"] == ["C1"]
    assert found["drivers"][0]["kind"] == "capacitor"
    assert 0.5 < found["drivers"][0]["share"] <= 1
    page = (tmp_path / "job" / "report.html").read_text(encoding="utf-8")
    assert 'id="drawing-drivers"' in page
    assert "by the magnitude first" in page
    assert "R1 and R2 are matched" in page
    assert "Ageing comes on top." in page


def test_the_assumptions_name_all_that_varies_and_only_that() -> None:
    plain = Population()
    assert assumptions(plain) == ["Each part is drawn on its own, uniformly within its tolerance."]
    assert left_out(plain) == "Temperature, ageing and the spread of op-amps come on top."
    full = parse_job(JOB + FULL).board.population
    text = " ".join(assumptions(full)).replace("\xa0", " ")
    for words in (
        "Resistors are drawn from a normal distribution",
        "capacitors uniformly within the tolerance",
        "Capacitors of the same value and tolerance come from one reel: up to 50 %",
        "R1 and R2 are matched: the ratio of any two is within 0.1 %",
        "differ by at most 5 ppm/K",
        "uniform from −10 °C to 60 °C",
        "within ±50 ppm/K for resistors.",
        "within ±40 % of its figure",
    ):
        assert words in text
    assert left_out(full) == "Ageing comes on top."
