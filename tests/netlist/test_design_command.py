"""The whole job, nothing replaced: a small board through every stage and through ngspice."""

from __future__ import annotations

import ctypes.util
import json
import os
import pty
import signal
import subprocess
import sys
from functools import partial

import pytest

from netlist import ngspice, verification
from netlist.cli.running import run
from netlist.pack import PACK_FILES
from netlist.stimulus import decks_of

JOB = """
title = "Smoothing, 1st order"
[target]
numerator = [5000]
denominator = [1, 5000]
[signal]
band = ["10 Hz", "5 kHz"]
[board]
form = "cascade"
"""

needs_ngspice = pytest.mark.skipif(
    ctypes.util.find_library("ngspice") is None, reason="the ngspice library is not installed"
)


def polewright(folder, *arguments, **environment):
    return subprocess.run(
        [sys.executable, "-m", "netlist.cli", *arguments],
        cwd=folder,
        env={**os.environ, **environment},
        capture_output=True,
        text=True,
        check=False,
    )


@needs_ngspice
def test_a_job_becomes_a_verified_pack_and_the_same_one_again(tmp_path):
    (tmp_path / "smooth.toml").write_text(JOB, encoding="utf-8")
    few = ("design", "smooth.toml", "--boards", "50")
    first = polewright(tmp_path, *few, "--json", PYTHONHASHSEED="1")
    assert first.returncode == 0, first.stderr
    record = json.loads(first.stdout)
    assert record["verdict"] == "pass"
    assert record["simulation"]["nodal_disagreement"] < 1e-6
    pack = {p.name: p.read_bytes() for p in (tmp_path / "smooth").iterdir()}
    assert pack["design.json"].decode() == first.stdout
    second = polewright(tmp_path, *few, "--into", "again", PYTHONHASHSEED="2")
    assert second.returncode == 0, second.stderr
    assert "PASS" in second.stdout
    assert {p.name: p.read_bytes() for p in (tmp_path / "again").iterdir()} == pack


def test_a_library_that_is_not_there_is_3_with_a_pack_marked_unverified(tmp_path):
    (tmp_path / "smooth.toml").write_text(JOB, encoding="utf-8")
    nowhere = {"NGSPICE_LIBRARY_PATH": "/nonexistent"}
    ended = polewright(tmp_path, "design", "smooth.toml", "--boards", "50", "--json", **nowhere)
    assert ended.returncode == 3
    assert json.loads(ended.stdout)["verdict"] == "unverified"
    assert len(ended.stderr.splitlines()) == 2
    assert "/nonexistent" in ended.stderr
    assert "install libngspice0" in ended.stderr
    pack = tmp_path / "smooth"
    assert sorted(p.name for p in pack.iterdir()) == sorted(PACK_FILES)
    assert (pack / "design.json").read_text(encoding="utf-8") == ended.stdout
    assert "NOT VERIFIED" in (pack / "report.html").read_text(encoding="utf-8")
    rows = (pack / "response.csv").read_text(encoding="utf-8").splitlines()
    assert len(rows) > 100
    assert all(row.endswith(",,,,") for row in rows[1:])
    assert polewright(tmp_path, "forms", "smooth.toml", **nowhere).returncode == 0


@needs_ngspice
@pytest.mark.parametrize(
    ("blow", "told"), [(signal.SIGSTOP, "time limit of 2 s"), (signal.SIGKILL, "ended")]
)
def test_a_simulator_that_hangs_or_crashes_is_3_and_the_pack_is_there(
    tmp_path, monkeypatch, capsys, blow, told
):
    """The blow falls on the process of the simulator before the response is asked for."""
    (tmp_path / "smooth.toml").write_text(JOB, encoding="utf-8")
    monkeypatch.chdir(tmp_path)
    monkeypatch.setattr(ngspice, "Simulator", partial(ngspice.Simulator, time_limit=2.0))
    verify = verification.verify

    def struck(made, *, simulator):
        simulator.ac(decks_of(made).board, ["out"])
        os.kill(simulator.process_id, blow)
        return verify(made, simulator=simulator)

    monkeypatch.setattr(verification, "verify", struck)
    assert run(["design", "smooth.toml", "--boards", "50"]) == 3
    out, err = capsys.readouterr()
    assert "UNVERIFIED" in out
    assert err.startswith("polewright: not verified: ")
    assert told in err
    record = json.loads((tmp_path / "smooth" / "design.json").read_text(encoding="utf-8"))
    assert record["verdict"] == "unverified"


@needs_ngspice
def test_progress_is_for_terminals_and_standard_output_is_json_alone(tmp_path):
    """Standard error is a terminal here, standard output is not."""
    (tmp_path / "smooth.toml").write_text(JOB, encoding="utf-8")
    command = [sys.executable, "-m", "netlist.cli", "design", "smooth.toml", "--json"]
    leader, follower = pty.openpty()
    with subprocess.Popen(command, cwd=tmp_path, stdout=subprocess.PIPE, stderr=follower) as made:
        os.close(follower)
        shown = b"".join(iter(partial(chunk, leader), b""))
        printed = made.stdout.read()
    os.close(leader)
    assert json.loads(printed)["verdict"] == "pass"
    assert b"\x1b" not in printed
    assert b"boards" in shown
    assert b"\x1b[" in shown


def chunk(terminal: int) -> bytes:
    """What a terminal was sent; nothing once its other end is closed."""
    try:
        return os.read(terminal, 65536)
    except OSError:
        return b""
