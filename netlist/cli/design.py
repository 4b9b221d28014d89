"""``polewright design JOB.toml``: the whole job, from H(s) to a verified pack."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import click

from netlist.cli.carrying import carry_out
from netlist.cli.options import as_json, job_file, with_traceback
from netlist.cli.running import Result
from synth.constants import LARGEST_SEED, MOST_BOARDS

if TYPE_CHECKING:
    from netlist.cli.progress import Report
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
    type=click.IntRange(1, MOST_BOARDS),
    default=10_000,
    show_default=True,
    help="How many boards to draw for the yield.",
)
@click.option(
    "--seed",
    metavar="N",
    type=click.IntRange(0, LARGEST_SEED),
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
    from netlist.mistakes import telling_lines
    from netlist.pack import check_pack_folder

    folder = default_folder(job_file) if into is None else into
    job = read_job(job_file)
    text = job.source.text if job.source else ""
    check_pack_folder(folder)

    def make(report: Report) -> Design:
        from netlist.processes import workers
        from synth.design import design

        with telling_lines(text, str(job_file)), workers() as mapper:
            return design(
                job, boards=boards, seed=seed, effort=effort, progress=report, mapper=mapper
            )

    return carry_out(make, folder, job_name=job_file.name, as_json=as_json)


def default_folder(job_file: Path) -> Path:
    """Beside the job, named after it: ``servo.toml`` goes to ``servo``; a job whose name has no
    suffix, ``servo``, to ``servo-pack``."""
    if job_file.suffix:
        return job_file.with_suffix("")
    return job_file.parent / f"{job_file.name}-pack"
