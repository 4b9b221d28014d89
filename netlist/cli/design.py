"""``polewright design JOB.toml``: the whole job, from H(s) to a verified pack."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING

import click

from netlist.cli.options import as_json, job_file, with_traceback
from netlist.cli.running import Result

if TYPE_CHECKING:
    from netlist.ngspice import Simulator
    from netlist.verification import Verification
    from synth.job import Job
    from synth.results import Design

__all__ = ["command", "default_folder"]


@click.command("design")
@job_file
@click.option(
    "--into",
    metavar="DIR",
    type=click.Path(path_type=Path),
    help="Folder of the pack; by default beside the job, named after it.",
)
@click.option(
    "--boards",
    metavar="N",
    type=click.IntRange(1, 10_000_000),
    default=1000,
    show_default=True,
    help="How many boards to draw for the yield.",
)
@click.option(
    "--seed",
    metavar="N",
    type=click.IntRange(0, 2**63 - 1),
    default=1,
    show_default=True,
    help="Seed of the random numbers: the same seed gives the same pack.",
)
@click.option(
    "--effort",
    metavar="N",
    type=click.IntRange(1, 1000),
    default=1,
    show_default=True,
    help="Search for values N times as long as usual.",
)
@as_json
@with_traceback
def command(
    job_file: Path, *, into: Path | None, boards: int, seed: int, effort: int, as_json: bool
) -> Result:
    """Design a board for JOB.toml, verify it in ngspice and write its pack.

    The pack is a folder with the report, the decks, the parts list and the drawings.  It is
    written whole or not at all; an earlier pack in its place is replaced.
    """
    from netlist.jobfile import read_job
    from netlist.pack import check_pack_folder

    folder = default_folder(job_file) if into is None else into
    job = read_job(job_file)
    check_pack_folder(folder)
    made, checked = _carried_out(
        job, folder, boards=boards, seed=seed, effort=effort, name=job_file.name
    )

    from netlist.cli.summary import EXIT_CODES, summary, warn
    from netlist.records import design_record, record_text, verdict_of

    warn(made, checked)
    code = EXIT_CODES[verdict_of(made, checked)]
    if as_json:
        return Result(code, record_text(design_record(made, checked)))
    return Result(code, summary(made, checked, folder=folder))


def _carried_out(
    job: Job, folder: Path, *, boards: int, seed: int, effort: int, name: str
) -> tuple[Design, Verification]:
    """Design, verify and write, with progress; what is slow to load is loaded here, once the
    job is known to be readable."""
    from netlist.cli.progress import progress

    with progress() as report, _early_simulator() as simulator:
        report("loading", 0, 1)
        from netlist.pack import write_pack
        from netlist.verification import verify
        from synth.design import design

        made = design(job, boards=boards, seed=seed, effort=effort, progress=report)
        report("simulating", 0, 1)
        checked = verify(made, simulator=simulator)
        report("writing the pack", 0, 1)
        write_pack(folder, made, checked, job_name=name)
    return made, checked


@contextmanager
def _early_simulator() -> Iterator[Simulator | None]:
    """The simulator, its process starting while the design is made; None where it is missing,
    which the verification then says."""
    from netlist.ngspice import Simulator
    from synth.errors import SimulatorMissingError

    try:
        simulator = Simulator()
    except SimulatorMissingError:
        yield None
        return
    with simulator:
        yield simulator


def default_folder(job_file: Path) -> Path:
    """Beside the job, named after it: ``servo.toml`` goes to ``servo``; a job whose name has no
    suffix, ``servo``, to ``servo-pack``."""
    if job_file.suffix:
        return job_file.with_suffix("")
    return job_file.parent / f"{job_file.name}-pack"
