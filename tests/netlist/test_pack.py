"""A pack holds all its files, ready to run, and only a pack is ever replaced."""

from __future__ import annotations

import json
import re

import pytest

from netlist.pack import PACK_FILES, is_pack, pack_files, write_pack
from synth.errors import JobError
from tests.netlist import boards

MADE = boards.design()
CHECKED = boards.verification(MADE)
FILES = pack_files(MADE, CHECKED, job_name="low-pass.toml")


def test_a_pack_holds_exactly_the_files_of_the_contract(tmp_path):
    place = write_pack(tmp_path / "x", MADE, CHECKED)
    assert sorted(p.name for p in place.iterdir()) == sorted(PACK_FILES)
    assert all(p.stat().st_size for p in place.iterdir())


def test_the_same_design_gives_the_same_bytes():
    assert pack_files(boards.design(), CHECKED, job_name="low-pass.toml") == FILES


def test_no_file_holds_a_date_or_a_path():
    for name, content in FILES.items():
        text = content.decode()
        assert not re.search(r"\b20\d\d-\d\d-\d\d\b", text), name
        assert not re.search(r"(?<![<\w.:/])/(home|root|tmp|usr|work|dev)/", text), name


def test_the_report_stays_small():
    assert len(FILES["report.html"]) < 1_500_000


def test_every_component_is_a_line_of_its_own_in_the_deck():
    deck = FILES["board.cir"].decode().splitlines()
    for part in json.loads(FILES["design.json"])["components"]:
        if part["kind"] != "op_amp":
            assert f"{part['ref']} {' '.join(part['nets'])} {part['value']!r}" in deck


def test_an_earlier_pack_is_replaced(tmp_path):
    place = write_pack(tmp_path / "x", MADE, boards.verification(MADE, failure="no ngspice"))
    assert json.loads((place / "design.json").read_text())["verdict"] == "unverified"
    write_pack(place, MADE, CHECKED)
    assert json.loads((place / "design.json").read_text())["verdict"] == "pass"


@pytest.mark.parametrize(
    "content", ["", "[]", "{", '{"format": 1}', '{"components": []}', "\xff", "[" * 100_000]
)
def test_a_folder_with_some_other_design_json_is_no_pack(tmp_path, content):
    (tmp_path / "design.json").write_text(content, encoding="latin-1")
    assert not is_pack(tmp_path)
    with pytest.raises(JobError, match="no earlier result"):
        write_pack(tmp_path, MADE, CHECKED)
    assert [p.name for p in tmp_path.iterdir()] == ["design.json"]


def test_a_design_that_cannot_be_drawn_leaves_the_earlier_pack(tmp_path, monkeypatch):
    place = write_pack(tmp_path / "x", MADE, CHECKED)
    before = {p.name: p.read_bytes() for p in place.iterdir()}

    def fail(*_):
        raise ValueError("cannot draw")

    monkeypatch.setattr("netlist.drawings.draw_all", fail)
    with pytest.raises(ValueError, match="cannot draw"):
        write_pack(place, boards.design(title="another"), CHECKED)
    assert {p.name: p.read_bytes() for p in place.iterdir()} == before
