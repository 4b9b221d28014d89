"""The pack: one folder that tells the whole story of a design, written whole or not at all.

The same design and verification give the same bytes: nothing in a pack holds a date, a path or
the order of a hash.
"""

from __future__ import annotations

import json
import os
from pathlib import Path
from typing import TYPE_CHECKING

from netlist.folder import check_destination, write_folder
from netlist.records import FORMAT, design_record, record_text
from synth.results import Design

if TYPE_CHECKING:
    from netlist.verification import Verification

__all__ = ["PACK_FILES", "check_pack_folder", "is_pack", "pack_files", "write_pack"]

PACK_FILES = (
    "report.html",
    "design.json",
    "board.cir",
    "step.cir",
    "response.csv",
    "parts.csv",
    "schematic.svg",
    "blocks.svg",
    "bode.svg",
)


def write_pack(
    folder: str | os.PathLike[str],
    design: Design,
    verification: Verification,
    *,
    job_name: str = "",
) -> Path:
    """Write the pack of a design to `folder` and return that path.

    Parameters
    ----------
    folder
        New, empty, or an earlier pack, which is replaced in one step.
    job_name
        File name of the job, for the command that repeats the design.

    Raises
    ------
    JobError
        The folder cannot be written or holds something else; nothing has changed then.
    """
    path = Path(folder)
    check_pack_folder(path)
    write_folder(path, pack_files(design, verification, job_name=job_name), is_ours=is_pack)
    return path


def check_pack_folder(folder: str | os.PathLike[str]) -> None:
    """Refuse a folder that `write_pack` would refuse, before any work is done for it."""
    check_destination(Path(folder), is_ours=is_pack)


def is_pack(folder: Path) -> bool:
    """Whether a folder is a pack: it holds a ``design.json`` of this program."""
    try:
        record = json.loads((folder / "design.json").read_text(encoding="utf-8"))
    except (OSError, ValueError, RecursionError):
        return False
    return isinstance(record, dict) and record.get("format") == FORMAT and "components" in record


def pack_files(
    design: Design, verification: Verification, *, job_name: str = ""
) -> dict[str, bytes]:
    """The content of every file of a pack, by name."""
    from netlist.drawings import draw_all
    from netlist.partslist import parts_list
    from netlist.report.page import report_page
    from netlist.stimulus import decks_of
    from netlist.tables import parts_table, response_table

    decks = decks_of(design)
    drawings = draw_all(design, verification)
    board = design.job.board
    lines = parts_list(design.circuit, supply=board.supply, networks=board.population.networks)
    texts = {
        "report.html": report_page(
            design, verification, drawings=drawings, lines=lines, job_name=job_name
        ),
        "design.json": record_text(design_record(design, verification)),
        "board.cir": decks.board,
        "step.cir": decks.step,
        "response.csv": response_table(design, verification),
        "parts.csv": parts_table(lines),
        "schematic.svg": drawings.schematic,
        "blocks.svg": drawings.blocks,
        "bode.svg": drawings.bode,
    }
    return {name: texts[name].encode("utf-8", "replace") for name in PACK_FILES}
