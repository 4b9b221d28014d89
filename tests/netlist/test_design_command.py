"""The whole job, nothing replaced: a small board through every stage and through ngspice."""

from __future__ import annotations

import ctypes.util
import json
import os
import subprocess
import sys

import pytest

JOB = """
title = "Smoothing, 1st order"
[target]
numerator = [5000]
denominator = [1, 5000]
[signal]
band = ["10 Hz", "5 kHz"]
"""

needs_ngspice = pytest.mark.skipif(
    ctypes.util.find_library("ngspice") is None, reason="the ngspice library is not installed"
)


def design(folder, *arguments, seed):
    return subprocess.run(
        [sys.executable, "-m", "netlist.cli", "design", "smooth.toml", *arguments],
        cwd=folder,
        env={**os.environ, "PYTHONHASHSEED": seed},
        capture_output=True,
        text=True,
        check=False,
    )


@needs_ngspice
def test_a_job_becomes_a_verified_pack_and_the_same_one_again(tmp_path):
    (tmp_path / "smooth.toml").write_text(JOB, encoding="utf-8")
    first = design(tmp_path, "--boards", "50", "--json", seed="1")
    assert first.returncode == 0, first.stderr
    record = json.loads(first.stdout)
    assert record["verdict"] == "pass"
    assert record["simulation"]["nodal_disagreement"] < 1e-6
    pack = {p.name: p.read_bytes() for p in (tmp_path / "smooth").iterdir()}
    assert pack["design.json"].decode() == first.stdout
    second = design(tmp_path, "--boards", "50", "--into", "again", seed="2")
    assert second.returncode == 0, second.stderr
    assert "PASS" in second.stdout
    assert {p.name: p.read_bytes() for p in (tmp_path / "again").iterdir()} == pack
