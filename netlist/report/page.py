"""The report: the whole story of a design on one page, readable offline.

The page holds everything it shows: style, script and drawings are in it, and nothing is loaded
from elsewhere.  Every text goes through the template's escaping.
"""

from __future__ import annotations

import re
import shlex
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from netlist.partslist import PartLine, packages
from netlist.records import all_checks, all_notices, verdict_of
from netlist.report import asked, boards, changes, choice, found, wording, worst
from netlist.svg import prefix_ids
from synth.evidence import Check
from synth.ranking import RANKED_BOARDS
from synth.results import Design

if TYPE_CHECKING:
    from jinja2 import Environment
    from markupsafe import Markup

    from netlist.drawings import Drawings
    from netlist.verification import Verification

__all__ = ["LOW_YIELD", "headline", "inlined", "report_page"]

LOW_YIELD = 0.9
"""Without a limit on the yield, a share of good boards below this one draws a warning."""

NO_VOLTAGE = 1e-6
"""An operating point this close to ground [V] is not worth a line."""

_HERE = Path(__file__).parent
_CONTROL = re.compile(r"[^\t\n\x20-\x7e\xa0-\ud7ff\ue000-\ufffd\U00010000-\U0010ffff]")


def report_page(
    design: Design,
    verification: Verification,
    *,
    drawings: Drawings,
    lines: Sequence[PartLine],
    job_name: str = "",
) -> str:
    """The page as HTML text.

    Parameters
    ----------
    drawings
        The pictures of the pack.
    lines
        The parts list.
    job_name
        File name of the job, for the command that repeats the design.
    """
    from importlib.metadata import version

    checks = all_checks(design, verification)
    outcome = verdict_of(design, verification)
    job = design.job
    return (
        _environment()
        .get_template("page.html")
        .render(
            design=design,
            job=job,
            verification=verification,
            verdict=outcome,
            headline=headline(checks, outcome),
            notices=all_notices(design, verification),
            numerator=asked.polynomial(job.target.numerator),
            denominator=asked.polynomial(job.target.denominator),
            roots=asked.roots(job.target),
            gains=asked.gain_lines(job),
            requirements=asked.requirements(job),
            checks=found.check_rows(
                sorted(checks, key=lambda c: c.passed)
            ),  # what fails comes first
            vendor_checks=_vendor_rows(verification),
            low_yield=job.accept.yield_share is None and design.tolerance.share < LOW_YIELD,
            changes=changes.change_rows(design.repick) if design.repick else [],
            change_errors=changes.change_errors(design.repick) if design.repick else [],
            forms=found.form_rows(design.candidates, design.form),
            ranked_boards=RANKED_BOARDS,
            first_to_bite=found.first_to_bite(design),
            swings=found.swing_rows(design.swings, design.circuit),
            values=found.value_rows(design.circuit),
            choice=choice.shown(design),
            worst=worst.shown(design),
            loop=found.loop_rows(design.loop),
            noise_parts=found.largest_noise(design),
            drifts=found.drift_rows(design.drifts),
            parts=found.part_rows(lines),
            chips=packages(design.circuit.amplifiers, taken=design.circuit.by_ref),
            operating_point=[
                (net, volts)
                for net, volts in sorted((verification.operating_point or {}).items())
                if abs(volts) > NO_VOLTAGE
            ],
            drawings={name: inlined(svg, name) for name, svg in drawings.by_name().items() if svg},
            readout=_readout(design, verification),
            command=_command(design, job_name),
            boards=boards.shown(design),
            version=version("polewright"),
        )
    )


def _vendor_rows(verification: Verification) -> list[dict[str, object]]:
    """The response with the vendor's model against H(s), where there is one."""
    look = verification.vendor
    return found.check_rows(look.against_target) if look else []


def _environment() -> Environment:
    """Templates of this folder, everything escaped, with the filters the page uses."""
    from jinja2 import Environment, FileSystemLoader, StrictUndefined

    environment = Environment(
        loader=FileSystemLoader(_HERE),
        autoescape=True,
        trim_blocks=True,
        lstrip_blocks=True,
        undefined=StrictUndefined,
    )
    environment.filters.update(
        number=wording.number,
        quantity=wording.quantity,
        decibel=wording.decibel,
        percent=wording.percent,
        share=wording.share,
        stated=wording.stated,
        spelled=wording.spelled,
        clean=lambda text: _CONTROL.sub(" ", str(text)),
    )
    return environment


def headline(checks: Sequence[Check], outcome: str) -> str:
    """The verdict in one sentence."""
    limited = [c for c in checks if c.limit is not None]
    if outcome == "pass":
        return f"Every limit is met: {len(limited)} of {len(limited)}."
    missed = [c.name for c in checks if not c.passed and (c.value is not None or outcome == "fail")]
    if outcome == "fail":
        return f"{len(missed)} of {len(limited)} limits missed: {', '.join(missed)}."
    predicted = f" The prediction already misses: {', '.join(missed)}." if missed else ""
    return "The simulator has not confirmed this design." + predicted


def inlined(svg: str, name: str) -> Markup:
    """A drawing of this program as it may stand in the page.

    Its ids start with `name`, and a style sheet within it reaches no further than itself.
    """
    from markupsafe import Markup

    body = prefix_ids(svg[svg.index("<svg") :], f"{name}-")
    scoped = re.sub(r"(<style[^>]*>\s*)\*\s*\{", lambda m: f"{m[1]}#drawing-{name} svg * {{", body)
    # Safe: drawings are made by this program, and they escape the texts in them.
    return Markup(scoped)


def _readout(design: Design, verification: Verification) -> dict[str, list[float | None]]:
    """What the cursor on the Bode plot shows, five digits, null where there is no number."""
    import numpy as np

    from netlist.plots.bode import unwrapped_deg

    error = verification.error if verification.failure is None else None
    source = design.frequency_hz if error is None else verification.frequency_hz
    frequency = np.asarray(source, dtype=float)
    target = design.wanted.response(frequency)
    with np.errstate(divide="ignore"):
        level = 20 * np.log10(np.abs(target))
    columns = {"hz": frequency, "target_db": level, "target_deg": unwrapped_deg(target)}
    if error is not None:
        columns |= {"error_db": error.magnitude_db, "error_deg": error.phase_deg}
    return {
        name: [float(f"{x:.5g}") if np.isfinite(x) else None for x in column]
        for name, column in columns.items()
    }


def _command(design: Design, job_name: str) -> str:
    """The command that makes this pack again."""
    if design.repick is not None:
        return f"polewright repick PACK {shlex.join(changes.repick_options(design.repick))}"
    name = shlex.quote(job_name or "JOB.toml")
    run = design.tolerance
    effort = f" --effort {design.effort}" if design.effort != 1 else ""
    return f"polewright design {name} --boards {run.boards} --seed {run.seed}{effort}"
