"""A pack from a drawer without one of its values, by the command: the drawer comes with it."""

from __future__ import annotations

import csv
import ctypes.util
import json
import shutil
from collections import Counter
from pathlib import Path

import pytest

from netlist.cli.running import run
from synth.quantities import parse

SCENARIO = Path(__file__).parents[2] / "scenarios" / "spare_gauge_drawer.toml"

pytestmark = pytest.mark.skipif(
    ctypes.util.find_library("ngspice") is None, reason="the ngspice library is not installed"
)


@pytest.fixture(scope="module")
def packed(tmp_path_factory):
    """A folder with the pack alone, neither job nor drawer beside it."""
    folder = tmp_path_factory.mktemp("drawer")
    for file in (SCENARIO, SCENARIO.with_suffix(".csv")):
        shutil.copy(file, folder)
    run(["design", str(folder / SCENARIO.name), "--boards", "100", "--into", str(folder / "old")])
    for file in (SCENARIO, SCENARIO.with_suffix(".csv")):
        (folder / file.name).unlink()
    return folder


def record(folder: Path) -> dict:
    return json.loads((folder / "design.json").read_text(encoding="utf-8"))


def in_drawer() -> dict[tuple[str, float], int]:
    """How many there are of each value."""
    held: Counter[tuple[str, float]] = Counter()
    with SCENARIO.with_suffix(".csv").open(encoding="utf-8", newline="") as stream:
        for row in csv.DictReader(stream):
            unit = "ohm" if row["kind"] == "resistor" else "F"
            held[row["kind"], parse(row["value"], unit)] += int(row["count"])
    return held


def taken(found: dict) -> Counter[tuple[str, float]]:
    return Counter((c["kind"], c["value"]) for c in found["components"] if c["kind"] != "op_amp")


@pytest.mark.parametrize("which", ["R1", "stock R4", "stock C3"])
def test_a_pack_from_a_drawer_is_made_again_from_what_is_left(packed, capsys, which) -> None:
    """One part without its value, or all without it: no more of anything than there is, and the
    value that is gone is taken by none that it concerns."""
    old = record(packed / "old")
    values = {c["ref"]: c.get("value") for c in old["components"]}
    ref = which.removeprefix("stock ")
    value = f"{values[ref]!r} ohm" if ref.startswith("R") else f"{values[ref] * 1e9:g} nF"
    what = f"{ref}={value}" if ref == which else f"stock {value}"
    into = packed / "new"
    capsys.readouterr()
    code = run(["repick", str(packed / "old"), "--without", what, "--into", str(into)])
    assert code in (0, 1), capsys.readouterr().err
    new = record(into)
    assert new["job"] == old["job"]
    assert list(new["job"]["files"]) == ["spare_gauge_drawer.csv"]
    assert new["simulation"]["nodal_disagreement"] < 1e-6
    held = in_drawer()
    assert all(held[part] >= count for part, count in taken(new).items())
    assert {c["ref"]: c.get("value") for c in new["components"]}[ref] != values[ref]
    if ref != which:
        kind = "resistor" if ref.startswith("R") else "capacitor"
        assert (kind, values[ref]) not in taken(new)
