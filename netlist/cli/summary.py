"""What the commands print for a person: short tables of plain text."""

from __future__ import annotations

import sys
import textwrap
from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

import click

from netlist.cli.progress import colour_on
from netlist.cli.running import say
from netlist.partslist import packages
from netlist.records import all_checks, all_notices, verdict_of
from netlist.report.changes import change_errors, change_rows
from netlist.report.choice import proof_line
from netlist.report.found import check_rows, form_rows
from netlist.report.page import LOW_YIELD
from netlist.report.wording import share, stated
from netlist.report.worst import worst_line
from synth.results import Candidate, Design

if TYPE_CHECKING:
    from netlist.verification import Verification

__all__ = ["EXIT_CODES", "forms_table", "summary", "warn"]

WIDTH = 96
"""Characters in a line of a paragraph."""

EXIT_CODES = {"pass": 0, "fail": 1, "unverified": 3}
_COLOURS = {"pass": "green", "fail": "red", "unverified": "yellow"}


def summary(design: Design, verification: Verification, *, folder: Path) -> str:
    """The design in a dozen lines: form, parts, each check, where the pack is."""
    outcome = verdict_of(design, verification)
    circuit, run, population = design.circuit, design.tolerance, design.job.board.population
    kinds = [p.kind for p in circuit.bought]
    chips = packages(circuit.amplifiers)
    limit = "" if design.job.accept.yield_share is not None else ", no limit stated"
    facts = (
        ("verdict", _coloured(outcome.upper(), _COLOURS[outcome])
         + f", {share(run.share)} of boards within limits"),
        ("form", design.form + (", output inverted" if design.inverted else "")),
        ("op-amps", f"{len(circuit.amplifiers)} in {_counted(len(chips), 'package')}"),
        ("parts", f"{_counted(kinds.count('resistor'), 'resistor')}, "
         f"{_counted(kinds.count('capacitor'), 'capacitor')}"),
        ("yield", f"{run.passed} of {run.boards} boards, "
         f"{share(run.low)} to {share(run.high)} at {stated(run.confidence, '%')} "
         f"confidence{limit}"),
        *((("worst", worst_line(design.worst, population)),) if design.worst else ()),
    )  # fmt: skip
    rows = [
        (str(r["name"]), str(r["limit"]), str(r["value"]), str(r["result"]), str(r["note"]))
        for r in check_rows(all_checks(design, verification))
    ]
    lines = [
        _printable(design.job.title),
        *(f"  {name:<9}{text}" for name, text in facts),
        "",
        *_table(("check", "limit", "value", "result", ""), rows),
        *_repicked(design),
        "",
        f"  pack     {_printable(str(folder))}",
    ]
    return _plain_spaces("\n".join(lines) + "\n")


FORM_COLUMNS = {
    "form": "form",
    "op_amps": "op-amps",
    "packages": "packages",
    "resistors": "R",
    "capacitors": "C",
    "ratio": "ratio",
    "nominal": "nominal",
    "yield": "yield",
    "interval": "95 % confidence",
    "error_95": "95th pct",
    "noise": "noise",
    "range": "range",
    "peak": "peak",
    "bandwidth": "GBW needed",
    "verdict": "verdict",
}


def forms_table(chosen: str, candidates: Iterable[Candidate]) -> str:
    """The forms side by side, then the one to take and why not each other one."""
    rows = form_rows(candidates, chosen)
    shown = [[str(r[key]) for key in FORM_COLUMNS] for r in rows if r["possible"]]
    width = max(len(str(r["form"])) for r in rows)
    lines = _table(tuple(FORM_COLUMNS.values()), shown)
    lines += ["", f"  {chosen.ljust(width)}  chosen"]
    for row in rows:
        if not row["chosen"]:
            words = "" if row["possible"] else "not possible: "
            lines.append(
                f"  {str(row['form']).ljust(width)}  {words}{_printable(str(row['reason']))}"
            )
    return _plain_spaces("\n".join(lines) + "\n")


def warn(design: Design, verification: Verification) -> None:
    """What the user should know, on standard error."""
    for notice in all_notices(design, verification):
        say(f"warning: {notice}")
    met = design.tolerance.share
    if design.job.accept.yield_share is None and met < LOW_YIELD:
        say(f"warning: only {_plain_spaces(share(met))} of the boards meet the limits")
    if verification.failure is not None:
        say(f"not verified: {verification.failure}")
        say("the pack is written and marked unverified; repeat the command once ngspice runs")


def _repicked(design: Design) -> list[str]:
    """What changed against an earlier design."""
    found = design.repick
    if found is None:
        return []
    rows = [(str(r["ref"]), str(r["before"]), str(r["after"]), str(r["by"]), str(r["sets"]))
            for r in change_rows(found)]  # fmt: skip
    errors = [(str(r["name"]), str(r["before"]), str(r["after"])) for r in change_errors(found)]
    return [
        "",
        *_table(("changed", "from", "to", "by", "sets"), rows),
        "",
        *_table(("over the band", "before", "after"), errors),
        *_proof(design),
    ]


def _proof(design: Design) -> list[str]:
    """How good the choice is against any other of the parts that were free, as a paragraph."""
    if design.certificate is None:
        return []
    text = _plain_spaces(proof_line(design.certificate, design.circuit))
    return ["", *(f"  {line}" for line in textwrap.wrap(text, WIDTH))]


def _table(header: Sequence[str], rows: Sequence[Sequence[str]]) -> list[str]:
    """Columns of equal width, two spaces apart."""
    cells = [[_printable(c) for c in row] for row in (header, *rows)]
    widths = [max(len(row[k]) for row in cells) for k in range(len(header))]
    return [
        ("  " + "  ".join(c.ljust(w) for c, w in zip(row, widths, strict=True))).rstrip()
        for row in cells
    ]


def _coloured(text: str, colour: str) -> str:
    return click.style(text, fg=colour, bold=True) if colour_on(sys.stdout) else text


def _counted(number: int, noun: str) -> str:
    return f"{number} {noun}{'' if number == 1 else 's'}"


def _printable(text: str) -> str:
    """`text` without what could steer a terminal."""
    return "".join(c if c.isprintable() or c == "\N{NO-BREAK SPACE}" else " " for c in text)


def _plain_spaces(text: str) -> str:
    return text.replace("\N{NO-BREAK SPACE}", " ")
