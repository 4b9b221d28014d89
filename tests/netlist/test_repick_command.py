"""A pack without what is out of stock, by the command: whole, verified, the same again."""

from __future__ import annotations

import ctypes.util
import json
import os
import re
import subprocess
import sys
from pathlib import Path

import pytest

from netlist.cli.repick import new_folder

JOB = """
title = "Smoothing, 2nd order"
[target]
numerator = [39478417.6]
denominator = [1, 8885.766, 39478417.6]
[signal]
band = ["100 Hz", "2 kHz"]
[board]
form = "controllable"
"""

needs_ngspice = pytest.mark.skipif(
    ctypes.util.find_library("ngspice") is None, reason="the ngspice library is not installed"
)


def polewright(folder, *arguments, seed="1"):
    return subprocess.run(
        [sys.executable, "-m", "netlist.cli", *arguments],
        cwd=folder,
        env={**os.environ, "PYTHONHASHSEED": seed},
        capture_output=True,
        text=True,
        check=False,
        timeout=120,
    )


@pytest.fixture(scope="module")
def packed(tmp_path_factory):
    """A folder with the pack of a job; the job file itself is gone."""
    folder = tmp_path_factory.mktemp("repick")
    (folder / "smooth.toml").write_text(JOB, encoding="utf-8")
    done = polewright(folder, "design", "smooth.toml", "--boards", "50")
    assert (folder / "smooth" / "design.json").exists(), done.stderr
    (folder / "smooth.toml").unlink()
    return folder


def record(folder: Path) -> dict:
    return json.loads((folder / "design.json").read_text(encoding="utf-8"))


def values(found: dict) -> dict[str, float]:
    return {c["ref"]: c["value"] for c in found["components"]}


def contents(folder: Path) -> dict[str, bytes]:
    return {p.name: p.read_bytes() for p in sorted(folder.iterdir())}


@needs_ngspice
def test_a_pack_without_a_value_is_verified_and_says_what_changed(packed) -> None:
    """The old pack stays as it is; the new one differs where it must, and again gives the same
    bytes, whatever the order of hashes."""
    before = contents(packed / "smooth")
    old = record(packed / "smooth")
    value = values(old)["R2"]
    done = polewright(packed, "repick", "smooth", "--without", f"R2={value:g}")
    assert done.returncode == 0, done.stderr
    assert "changed" in done.stdout and "over the band" in done.stdout
    told = next(line for line in done.stdout.splitlines() if "yield, boards" in line)
    assert contents(packed / "smooth") == before
    new = record(packed / "smooth-repick")
    assert new["verdict"] == "pass"
    assert new["simulation"]["nodal_disagreement"] < 1e-6
    changed = {c["ref"]: (c["before"], c["after"]) for c in new["repick"]["changed"]}
    assert "R2" in new["repick"]["missing"] and "R2" in changed
    assert changed == {
        ref: (values(old)[ref], v) for ref, v in values(new).items() if v != values(old)[ref]
    }
    errors = [new["repick"][k]["rms_error"] for k in ("before", "after")]
    assert errors == pytest.approx([d["nominal"]["rms_error"] for d in (old, new)], rel=1e-9)
    shares = [new["repick"][k]["yield"] for k in ("before", "after")]
    assert shares == [d["yield"]["passed"] / d["yield"]["boards"] for d in (old, new)]
    assert re.findall(r"[0-9.]+ %", told) == [f"{100 * s:#.4g} %" for s in shares]
    assert new["job"] == old["job"]
    page = (packed / "smooth-repick" / "report.html").read_text(encoding="utf-8")
    assert 'id="changed"' in page and "polewright repick PACK --without" in page
    again = polewright(
        packed, "repick", "smooth", "--without", f"r2 = {value:g}", "--into", "again", "--json",
        seed="2",
    )  # fmt: skip
    assert again.returncode == 0, again.stderr
    assert again.stdout.encode() == contents(packed / "smooth-repick")["design.json"]
    assert contents(packed / "again") == contents(packed / "smooth-repick")


@needs_ngspice
def test_a_new_pack_can_be_repicked_in_turn(packed) -> None:
    """And what was out of stock the first time is not taken again."""
    first = values(record(packed / "smooth"))["R1"]
    polewright(packed, "repick", "smooth", "--without", f"R1={first:g}", "--into", "one")
    second = values(record(packed / "one"))["R1"]
    done = polewright(packed, "repick", "one", "--without", f"R1={second:g}", "--into", "two")
    assert done.returncode == 0, done.stderr
    assert len({first, second, values(record(packed / "two"))["R1"]}) == 3


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["smooth", "--without", "R99=1k"], "--without: got the part 'R99', expected one of R1"),
        (["smooth", "--without", "R1=1.23k"], "got R1=1.23 kohm, but the design has R1="),
        (["smooth", "--without", "R1=much"], "--without: got 'much', expected a resistance"),
        (["smooth", "--without", "E24 1.23k"], "got E24 1.23 kohm, but no part"),
        (["smooth"], "Missing option '--without'"),
        (["nothing", "--without", "R1=1k"], "nothing: does not exist, expected the folder of a"),
        ([".", "--without", "R1=1k"], "holds no design.json, expected the folder of a pack"),
    ],
)
def test_what_cannot_be_done_is_2_one_line_and_nothing_written(packed, arguments, message) -> None:
    """The old pack is untouched, and no new folder is there."""
    before = sorted(p.name for p in packed.iterdir())
    old = contents(packed / "smooth")
    done = polewright(packed, "repick", *arguments, "--into", "refused")
    assert (done.returncode, done.stdout) == (2, "")
    assert done.stderr.startswith(f"polewright: {message}") or message in done.stderr
    assert done.stderr.count("\n") == 1
    assert sorted(p.name for p in packed.iterdir()) == before
    assert contents(packed / "smooth") == old


def test_the_old_pack_is_never_the_new_one(packed) -> None:
    """Not by another spelling of its name either."""
    value = values(record(packed / "smooth"))["R1"]
    before = contents(packed / "smooth")
    done = polewright(
        packed, "repick", "smooth/", "--without", f"R1={value:g}", "--into", "./smooth/../smooth"
    )
    assert done.returncode == 2
    assert "the old pack, expected another folder" in done.stderr
    assert contents(packed / "smooth") == before


def test_the_new_pack_is_not_put_into_the_old_one(packed) -> None:
    """Nothing is written there."""
    value = values(record(packed / "smooth"))["R1"]
    before = contents(packed / "smooth")
    done = polewright(
        packed, "repick", "smooth", "--without", f"R1={value:g}", "--into", "smooth/new"
    )
    assert done.returncode == 2
    assert "inside the old pack, expected another folder" in done.stderr
    assert contents(packed / "smooth") == before


def test_the_new_pack_stands_beside_the_old_one(tmp_path, monkeypatch) -> None:
    """However the old one is named."""
    (tmp_path / "servo" / "inner").mkdir(parents=True)
    monkeypatch.chdir(tmp_path / "servo")
    assert new_folder(Path("a/servo")) == Path("a/servo-repick")
    assert new_folder(Path("v1.2")) == Path("v1.2-repick")
    for here in (Path(), Path("inner/..")):
        assert new_folder(here) == tmp_path.resolve() / "servo-repick"
