"""The outer layer: job files, decks, ngspice, drawings, the pack, the command line.

A script does what ``polewright design`` does in four calls::

    from netlist import design, read_job, verify, write_pack

    job = read_job("servo.toml")
    board = design(job, boards=10_000, seed=1)
    proof = verify(board)
    write_pack("servo", board, proof)

Each name is loaded when it is first used, so that importing the package stays quick.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from netlist.jobfile import parse_job, read_job
    from netlist.pack import pack_files, write_pack
    from netlist.partslist import parts_list
    from netlist.records import design_record, verdict_of
    from netlist.verification import Verification, verify
    from synth.design import compare_forms, design
    from synth.errors import PolewrightError
    from synth.job import Job
    from synth.results import Design

__all__ = [
    "Design",
    "Job",
    "PolewrightError",
    "Verification",
    "compare_forms",
    "design",
    "design_record",
    "pack_files",
    "parse_job",
    "parts_list",
    "read_job",
    "verdict_of",
    "verify",
    "write_pack",
]

_HOME = {
    "Design": "synth.results",
    "Job": "synth.job",
    "PolewrightError": "synth.errors",
    "Verification": "netlist.verification",
    "compare_forms": "synth.design",
    "design": "synth.design",
    "design_record": "netlist.records",
    "pack_files": "netlist.pack",
    "parse_job": "netlist.jobfile",
    "parts_list": "netlist.partslist",
    "read_job": "netlist.jobfile",
    "verdict_of": "netlist.records",
    "verify": "netlist.verification",
    "write_pack": "netlist.pack",
}


def __getattr__(name: str) -> object:
    if name not in _HOME:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    value: object = getattr(import_module(_HOME[name]), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted({*globals(), *__all__})
