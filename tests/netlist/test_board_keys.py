"""The drawer, fixed values and switches of the board: from the job file to the pack."""

from __future__ import annotations

import csv
import json

import pytest

from netlist.cli.running import run
from netlist.jobfile import parse_job, read_job
from synth.errors import JobError
from synth.parts import StockItem

JOB = """
[target]
numerator = [5000]
denominator = [1, 5000]
[signal]
band = ["10 Hz", "2 kHz"]
[board]
inverted = "yes"
"""
DRAWER = (
    "kind,value,tolerance,count\nresistor,10k,0.1 %,1\nresistor,10k,1 %,9\nresistor,22k,1 %,1\n"
)


def refusal(text: str, **where: object) -> str:
    with pytest.raises(JobError) as caught:
        parse_job(text, name="bad.toml", **where)
    return str(caught.value)


def test_keys_reach_the_board_and_their_defaults_are_none_of_them(tmp_path) -> None:
    (tmp_path / "drawer.csv").write_text(DRAWER, encoding="utf-8")
    extra = 'stock = "drawer.csv"\nshare_values = true\npairs = true\n'
    fixed = '[board.fixed]\nC1 = "10 nF"\nR2 = "10k"\n'
    board = parse_job(JOB + extra + fixed, folder=tmp_path).board
    assert board.fixed == (("C1", 1e-8), ("R2", 1e4))
    assert board.share_values and board.pairs
    assert board.resistors.source == "stock"
    assert board.resistors.stock[0] == StockItem(value=1e4, tolerance=0.001, count=1)
    assert board.capacitors.source == "E12"
    plain = parse_job(JOB).board
    assert (plain.fixed, plain.share_values, plain.pairs) == ((), False, False)


def test_the_drawer_lies_beside_the_job(tmp_path, monkeypatch) -> None:
    """Whatever the working folder is."""
    folder = tmp_path / "board"
    folder.mkdir()
    (folder / "drawer.csv").write_text(DRAWER, encoding="utf-8")
    (folder / "job.toml").write_text(JOB + 'stock = "drawer.csv"\n', encoding="utf-8")
    monkeypatch.chdir(tmp_path)
    assert read_job("board/job.toml").board.resistors.values.tolist() == [1e4, 2.2e4]


def test_a_stock_without_a_folder_is_refused() -> None:
    assert refusal(JOB + 'stock = "drawer.csv"\n') == (
        "bad.toml:9: board.stock: got 'drawer.csv', but this job comes without a folder to look "
        "in; expected a job read from a file"
    )


@pytest.mark.parametrize(
    ("line", "message"),
    [
        ("fixed = 3", ":9: board.fixed: got 3, expected a table such as {C1 = '10 nF'}"),
        (
            "[board.fixed]\nL1 = '1 nF'",
            ":10: board.fixed.L1: got the reference 'L1', expected one such as 'R3' or 'C1'",
        ),
        (
            "[board.fixed]\nC1 = '4k7'",
            ":10: board.fixed.C1: got '4k7', expected a capacitance such as '10 nF' or '2n2'",
        ),
        (
            "[board.fixed]\nR1 = '10.001k'",
            ":10: board.fixed.R1: got '10.001k', expected at most four digits",
        ),
        (
            "[board.fixed]\nR1 = '100 ohm'",
            ":10: board.fixed.R1: got 100 ohm, expected 1 kohm to 1 Mohm, the range of resistors",
        ),
        ("pairs = 'yes'", ":9: board.pairs: got 'yes', expected true or false"),
        ("share_values = 1", ":9: board.share_values: got 1, expected true or false"),
    ],
)
def test_what_cannot_be_meant_is_refused_with_its_key(line: str, message: str) -> None:
    assert refusal(f"{JOB}{line}\n") == f"bad.toml{message}"


def test_several_fixed_values_are_told_at_once() -> None:
    text = JOB + "[board.fixed]\nL1 = '1 nF'\nR1 = 'x'\n"
    assert [m.split(":")[1] for m in refusal(text).split("\n")] == ["10", "11"]


@pytest.mark.parametrize(
    ("fixed", "message"),
    [
        ("R1 = '12k'", "R1: got 12 kohm, expected a value in the stock; the nearest is 10 kohm"),
        ("R1 = '22k'\nR2 = '22k'", "fixed: got R1, R2 of 22 kohm, expected at most the 1 in the"),
    ],
)
def test_a_fixed_value_comes_out_of_the_stock(tmp_path, fixed: str, message: str) -> None:
    (tmp_path / "drawer.csv").write_text(DRAWER, encoding="utf-8")
    text = f"{JOB}stock = 'drawer.csv'\n[board.fixed]\n{fixed}\n"
    assert message in refusal(text, folder=tmp_path)


@pytest.fixture
def in_folder(tmp_path, monkeypatch):
    """The working folder, an empty one."""
    monkeypatch.chdir(tmp_path)
    return tmp_path


@pytest.mark.parametrize(
    ("board", "drawer", "message"),
    [
        ("stock = 'drawer.csv'", "kind,value,tolerance\n", "drawer.csv: got no parts"),
        ("stock = 'drawer.csv'", "kind,value,tolerance\nresistor,1x,1 %\n", ":2: column 2 (value)"),
        ("stock = 'gone.csv'", DRAWER, "gone.csv: no such file"),
        ("stock = ''", DRAWER, "board.stock: got '', expected the name of a file; leave the key"),
        ("stock = ' '", DRAWER, "board.stock: got ' ', expected the name of a file; leave the"),
        ("stock = 'drawer.csv'", "kind,value,tolerance\nresistor,1,1 %\n", "no value of stock"),
        (
            "stock = 'drawer.csv'",
            "kind,value,tolerance,count\nresistor,10k,1 %,1\n",
            "the circuit needs 2 resistors, the stock has 1 from 1 kohm to 1 Mohm",
        ),
        ("[board.fixed]\nC1 = '1 F'", DRAWER, "board.fixed.C1: got 1 F, expected 100 pF to 1 uF"),
        ("[board.fixed]\nR9 = '10k'", DRAWER, "R9: got a reference that does not exist in this"),
        (
            "[board.fixed]\nR2 = '10k'\nC1 = '100 nF'",
            DRAWER,
            "but the controllable form would need about",
        ),
    ],
)
def test_bad_input_ends_with_2_and_writes_nothing(
    in_folder, capsys, board: str, drawer: str, message: str
) -> None:
    (in_folder / "drawer.csv").write_text(drawer, encoding="utf-8")
    text = JOB.replace("[board]\n", "[board]\nform = 'controllable'\n") + board + "\n"
    (in_folder / "job.toml").write_text(text, encoding="utf-8")
    assert run(["design", "job.toml"]) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert message in err
    assert sorted(p.name for p in in_folder.iterdir()) == ["drawer.csv", "job.toml"]


def test_the_pack_says_where_each_part_comes_from(in_folder, capsys) -> None:
    """Source and tolerance of its own line: in the record, the parts list, the drawings and the
    report."""
    (in_folder / "drawer.csv").write_text(DRAWER, encoding="utf-8")
    text = JOB.replace("5000", "10000") + "stock = 'drawer.csv'\n[board.fixed]\nC1 = '9.9 nF'\n"
    (in_folder / "job.toml").write_text(text, encoding="utf-8")
    assert run(["design", "job.toml", "--boards", "20", "--json"]) in (0, 1, 3)
    record = json.loads(capsys.readouterr().out)
    found = {
        c["ref"]: (c["value"], c["series"], c["tolerance"], c["fixed"])
        for c in record["components"]
        if c["kind"] != "op_amp"
    }
    assert found == {
        "R1": (1e4, "stock", 0.001, False),
        "R2": (1e4, "stock", 0.01, False),
        "C1": (9.9e-9, "fixed", 0.05, True),
    }
    rows = list(csv.DictReader((in_folder / "job" / "parts.csv").read_text().splitlines()))
    parts = [(r["refs"], r["series"], r["tolerance"]) for r in rows[:3]]
    assert parts == [("R1", "stock", "0.001"), ("R2", "stock", "0.01"), ("C1", "fixed", "0.05")]
    assert "stock, 0.1 %; stock, 1 %" in (in_folder / "job" / "schematic.svg").read_text()
    report = (in_folder / "job" / "report.html").read_text()
    assert "from stock: 2 values, 0.1\N{NO-BREAK SPACE}% to 1\N{NO-BREAK SPACE}%" in report
    assert "C1 = 9.9\N{NO-BREAK SPACE}nF" in report
