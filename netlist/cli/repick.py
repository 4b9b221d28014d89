"""``polewright repick PACK --without R7=11k3``: a pack without what is out of stock."""

from __future__ import annotations

import os
from pathlib import Path
from typing import TYPE_CHECKING

import click

from netlist.cli.carrying import carry_out
from netlist.cli.options import as_json, with_traceback
from netlist.cli.running import Result
from synth.errors import JobError

if TYPE_CHECKING:
    from netlist.cli.progress import Report
    from synth.results import Design

__all__ = ["command", "new_folder"]


@click.command("repick")
@click.argument("pack", metavar="PACK", type=click.Path(path_type=Path))
@click.option(
    "--without",
    metavar="WHAT",
    multiple=True,
    required=True,
    help='What is out of stock: R7=11k3 for one part, "E96 11k3" for every part of a series; '
    "may be repeated.",
)
@click.option(
    "--bought",
    metavar="REFS",
    multiple=True,
    help='Parts that must keep their values, such as "R1 R2 C3"; may be repeated.',
)
@click.option("--all-free", is_flag=True, help="Choose every part anew that is not in --bought.")
@click.option(
    "--into",
    metavar="DIR",
    type=click.Path(path_type=Path),
    help="Folder of the new pack; by default beside the old one, NAME-repick.",
)
@as_json
@with_traceback
def command(
    pack: Path,
    *,
    without: tuple[str, ...],
    bought: tuple[str, ...],
    all_free: bool,
    into: Path | None,
    as_json: bool,
) -> Result:
    """Choose other values in PACK for what is out of stock; write a new pack.

    Every other part keeps its value as long as the limits can be met so; otherwise further
    parts are freed, as few as possible.  The old pack stays as it is.
    """
    from netlist.pack import check_pack_folder
    from netlist.packfile import read_pack
    from netlist.without import read_references, read_shortage

    earlier = read_pack(pack)
    kinds = {p.ref: p.kind for p in earlier.parts}
    shortages = tuple(read_shortage(text, kinds) for text in without)
    kept = read_references(" ".join(bought))
    folder = new_folder(pack) if into is None else into
    new, old = Path(os.path.realpath(folder)), Path(os.path.realpath(pack))
    if new.is_relative_to(old):
        place = "the old pack" if new == old else "inside the old pack"
        raise JobError(f"got {folder}, {place}, expected another folder", key="--into")
    check_pack_folder(folder)

    def make(report: Report) -> Design:
        from synth.repicking import Request, repick

        request = Request(shortages=shortages, bought=kept, all_free=all_free)
        return repick(earlier, request, progress=report)

    source = earlier.job.source
    return carry_out(make, folder, job_name=source.name if source else "", as_json=as_json)


def new_folder(pack: Path) -> Path:
    """Beside the pack: ``servo`` goes to ``servo-repick``."""
    named = pack if pack.name not in ("", "..") else pack.resolve()
    return named.with_name(f"{named.name}-repick")
