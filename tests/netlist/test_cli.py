"""What the command line promises scripts: exit codes, and what goes to which stream.

The stages behind it are replaced by a board made by hand; the whole pipeline has its own test.
"""

from __future__ import annotations

import json
import os
import pty
import subprocess
import sys
from dataclasses import replace
from pathlib import Path
from types import ModuleType

import pytest

from netlist.cli.design import command, default_folder
from netlist.cli.running import run
from synth.errors import (
    ExpressionError,
    JobError,
    NumericalError,
    PolewrightError,
    RealizationError,
    SimulationTimeoutError,
)
from synth.evidence import Check
from tests.netlist import boards

MISSED = (Check("peak at U1", 1.0, 2.0, "V", False, "clips at 1 kHz"),)


@pytest.fixture
def stages(monkeypatch, tmp_path):
    """Replaces reading, designing and verifying; set `raises` or the others in a test."""

    class Stages:
        raises: BaseException | None = None
        failure: str | None = None
        checks = boards.LIMITS
        boards = 1000
        effort = 1

        @property
        def made(self):
            made = boards.design(checks=self.checks, boards=self.boards)
            return replace(made, effort=self.effort)

    stages = Stages()

    def design(job, *, boards=1000, seed=1, effort=1, progress=None, mapper=None):
        stages.effort = effort
        progress("drawing boards", 1, 2)
        if stages.raises is not None:
            raise stages.raises
        return stages.made

    replaced = {
        "synth.design": {
            "design": design,
            "compare_forms": lambda job, **options: ("controllable", stages.made.candidates),
        },
        "netlist.verification": {
            "verify": lambda made, *, simulator=None: boards.verification(
                made, failure=stages.failure
            )
        },
        "netlist.jobfile": {"read_job": lambda path: boards.job()},
    }
    for name, content in replaced.items():
        module = ModuleType(name)
        module.__dict__.update(content)
        monkeypatch.setitem(sys.modules, name, module)
    monkeypatch.setattr("netlist.drawings.draw_all", lambda *_: boards.drawings())
    monkeypatch.chdir(tmp_path)
    return stages


def test_a_pass_is_0_and_the_summary_names_form_parts_checks_and_pack(stages, capsys):
    assert run(["design", "low-pass.toml"]) == 0
    out, err = capsys.readouterr()
    for words in (
        "PASS, 99.20 % of boards within limits",
        "controllable",
        "3 in 1 package",
        "6 resistors, 2 capacitors",
        "no limit stated",
        "low-pass",
    ):
        assert words in out
    line = next(x for x in out.splitlines() if "magnitude error" in x)
    assert line.split() == ["magnitude", "error", "0.5", "dB", "0.127", "dB", "pass"]
    assert err == ""
    assert sorted(p.name for p in Path("low-pass").iterdir())[0] == "blocks.svg"


def test_a_missed_limit_is_1_and_the_pack_is_there(stages, capsys):
    stages.checks = MISSED
    assert run(["design", "x.toml", "--into", "deep/pack"]) == 1
    assert "FAIL" in capsys.readouterr().out
    assert Path("deep/pack/design.json").exists()


def test_without_a_simulator_it_is_3_and_the_pack_is_marked_unverified(stages, capsys):
    stages.failure = "the ngspice library is not installed"
    assert run(["design", "x.toml"]) == 3
    out, err = capsys.readouterr()
    assert "UNVERIFIED" in out
    assert "not verified: the ngspice library is not installed" in err
    assert json.loads(Path("x/design.json").read_text())["verdict"] == "unverified"
    assert "NOT VERIFIED" in Path("x/report.html").read_text()


@pytest.mark.parametrize(
    ("error", "code", "line"),
    [
        (JobError("got -1, want more", key="signal.band"), 2, "x.toml: signal.band: got -1, want"),
        (RealizationError("no circuit fits"), 2, "no circuit fits"),
        (SimulationTimeoutError("took too long"), 3, "took too long"),
        (NumericalError("lost digits"), 70, "a defect in the program: NumericalError: lost"),
        (PolewrightError("odd"), 70, "a defect in the program: PolewrightError: odd"),
        (KeyError("x"), 70, "a defect in the program: KeyError: 'x' (test_cli.py:"),
        (KeyboardInterrupt(), 130, "interrupted"),
    ],
)
def test_each_failure_has_its_code_one_clear_line_and_leaves_nothing(
    stages, capsys, error, code, line
):
    stages.raises = error
    assert run(["design", "x.toml"]) == code
    out, err = capsys.readouterr()
    assert out == ""
    assert err.lstrip().startswith(f"polewright: {line}")
    assert "Traceback" not in err
    assert list(Path().iterdir()) == []


def test_an_expression_error_points_at_the_character(stages, capsys):
    stages.raises = ExpressionError("got ')'", text="1/(s+", position=5)
    assert run(["design", "x.toml"]) == 2
    assert capsys.readouterr().err.splitlines()[1:] == ["1/(s+", "     ^"]


def test_traceback_shows_where_a_defect_is(stages, capsys):
    stages.raises = KeyError("x")
    assert run(["design", "x.toml", "--traceback"]) == 70
    assert "Traceback (most recent call last)" in capsys.readouterr().err


@pytest.mark.parametrize(
    "arguments",
    [
        ["desing", "x.toml"],
        ["design"],
        ["design", "x.toml", "--boards", "0"],
        ["design", "x.toml", "--seed", "-1"],
        ["design", "x.toml", "--effort", "0"],
        ["design", "x.toml", "--effort", "1.5"],
        ["design", "x.toml", "--nonsense"],
        ["design", "x.toml", "y.toml"],
        ["--nonsense"],
    ],
)
def test_a_slip_on_the_command_line_is_2_and_one_line(arguments, capsys):
    assert run(arguments) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert len(err.splitlines()) == 1
    assert "--help" in err


def test_effort_reaches_the_search_and_the_command_that_repeats_it(stages, tmp_path, capsys):
    assert run(["design", "x.toml", "--effort", "4"]) == 0
    assert json.loads((tmp_path / "x" / "design.json").read_text())["choice"]["effort"] == 4
    assert "--effort 4" in (tmp_path / "x" / "report.html").read_text()
    capsys.readouterr()


def test_json_is_the_content_of_design_json_and_nothing_else(stages, capsys):
    stages.boards = 60
    assert run(["design", "x.toml", "--json"]) == 0
    out, err = capsys.readouterr()
    assert out == Path("x/design.json").read_text(encoding="utf-8")
    assert "warning: only 86.67 % of the boards" in err


def test_forms_prints_the_comparison_and_writes_nothing(stages, capsys):
    assert run(["forms", "x.toml"]) == 0
    out = capsys.readouterr().out
    table, reasons = (part.splitlines() for part in out.split("\n\n"))
    assert [x.split()[0] for x in table] == ["form", "controllable", "observable"]
    assert "98.40 % to 99.65 %" in table[1]
    assert [" ".join(x.split()) for x in reasons] == [
        "controllable chosen",
        "observable 4 op-amps, controllable does it with 3",
        "cascade not possible: no capacitor lets R land within 1 kohm to 1 Mohm",
    ]
    assert run(["forms", "x.toml", "--json"]) == 0
    record = json.loads(capsys.readouterr().out)
    assert record["chosen"] == "controllable"
    assert record["forms"][2]["possible"] is False
    assert record["forms"][2]["spread_db"] is None
    first = record["forms"][0]
    assert first["yield"] == {"boards": 1000, "passed": 992, "low": 0.984, "high": 0.9965}
    assert first["packages_of_4"] == 1
    assert first["gain_bandwidth_needed_hz"] == 3.1e5
    assert first["verdict"] == "pass"
    assert list(Path().iterdir()) == []


def test_a_folder_that_is_no_pack_is_refused_before_any_work(stages, capsys):
    Path("x").mkdir()
    Path("x/thesis.tex").write_text("years")
    stages.raises = AssertionError("work was done")
    assert run(["design", "x.toml"]) == 2
    assert "holds files but no earlier result" in capsys.readouterr().err
    assert [p.name for p in Path("x").iterdir()] == ["thesis.tex"]


def test_the_same_job_twice_gives_the_same_bytes(stages):
    def pack():
        assert run(["design", "x.toml"]) == 0
        return {p.name: p.read_bytes() for p in Path("x").iterdir()}

    assert pack() == pack()


def test_text_from_the_job_cannot_steer_the_terminal(stages, capsys):
    stages.raises = JobError("got '\x1b[2J\x07', expected a number")
    assert run(["design", "x.toml"]) == 2
    assert "\x1b" not in capsys.readouterr().err


@pytest.mark.parametrize(
    ("job", "folder"),
    [("a/x.toml", "a/x"), ("x.y.toml", "x.y"), ("x", "x-pack"), ("./x.toml", "x")],
)
def test_the_pack_goes_beside_the_job(job, folder):
    assert default_folder(Path(job)) == Path(folder)


def polewright(*arguments, **options):
    command = [sys.executable, "-m", "netlist.cli", *arguments]
    return subprocess.run(command, capture_output=True, text=True, check=False, **options)


def test_help_loads_nothing_heavy():
    heavy = ("numpy", "scipy", "matplotlib", "jinja2", "rich", "pydantic", "PySpice", "schemdraw")
    script = (
        "import sys; from netlist.cli.running import run; run(['--help']);"
        f"print('LOADED', [m for m in {heavy!r} if m in sys.modules])"
    )
    ended = subprocess.run(
        [sys.executable, "-c", script], capture_output=True, text=True, check=True
    )
    assert ended.stdout.splitlines()[-1] == "LOADED []"
    assert "design" in ended.stdout


def test_a_missing_job_is_2_in_a_process_of_its_own(tmp_path):
    ended = polewright("design", str(tmp_path / "none.toml"))
    assert ended.returncode == 2
    assert ended.stdout == ""
    assert len(ended.stderr.splitlines()) == 1
    assert "none.toml" in ended.stderr


def test_a_reader_who_leaves_early_causes_no_noise():
    read, write = os.pipe()
    os.close(read)
    try:
        command = [sys.executable, "-m", "netlist.cli", "--help"]
        ended = subprocess.run(
            command, stdout=write, stderr=subprocess.PIPE, text=True, check=False
        )
    finally:
        os.close(write)
    assert ended.stderr == ""
    assert ended.returncode == 0


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="needs the device that is always full")
def test_a_full_disk_behind_standard_output_is_one_line(stages, monkeypatch, capsys):
    with Path("/dev/full").open("w") as full:
        monkeypatch.setattr(sys, "stdout", full)
        assert run(["forms", "x.toml"]) == 2
    line = "polewright: cannot write to standard output: no space left on device\n"
    assert capsys.readouterr().err == line


@pytest.mark.parametrize("no_color", ["", "1"])
def test_colour_is_for_terminals_and_only_without_no_color(no_color):
    leader, follower = pty.openpty()
    script = (
        "import sys; from netlist.cli.summary import _coloured; print(_coloured('PASS', 'green'))"
    )
    environment = {**os.environ, "NO_COLOR": no_color}
    try:
        subprocess.run([sys.executable, "-c", script], stdout=follower, env=environment, check=True)
        os.close(follower)
        shown = os.read(leader, 1000).decode()
    finally:
        os.close(leader)
    assert ("\x1b[" in shown) == (not no_color)


def test_the_version_is_that_of_the_distribution():
    from importlib.metadata import version

    assert polewright("--version").stdout == f"polewright {version('polewright')}\n"


def test_the_command_draws_as_many_boards_as_the_library_does():
    from synth.design import DEFAULT_BOARDS

    (option,) = (p for p in command.params if p.name == "boards")
    assert option.default == DEFAULT_BOARDS == 10_000
