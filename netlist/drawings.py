"""Every picture of a pack, drawn once and used in the folder and on the page.

An empty text stands for a picture there is nothing to draw in.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from synth.evidence import DB_PER_NEPER
from synth.results import Design

if TYPE_CHECKING:
    from netlist.verification import Verification

__all__ = ["Drawings", "draw_all", "one_line"]

LONGEST_TITLE = 100


@dataclass(frozen=True, kw_only=True)
class Drawings:
    """SVG texts by what they show."""

    schematic: str
    blocks: str
    bode: str
    noise: str = ""
    step: str = ""
    swings: str = ""
    drivers: str = ""

    def by_name(self) -> dict[str, str]:
        """The drawings by name, in the order of the attributes."""
        return {
            "schematic": self.schematic,
            "blocks": self.blocks,
            "bode": self.bode,
            "noise": self.noise,
            "step": self.step,
            "swings": self.swings,
            "drivers": self.drivers,
        }


def draw_all(design: Design, verification: Verification) -> Drawings:
    """Draw everything a pack shows."""
    from netlist.blocks import draw_blocks
    from netlist.plots import noise_plot, swing_chart
    from netlist.schematic import draw_schematic

    job, title = design.job, one_line(design.job.title)
    sign = "output −H(s)" if design.inverted else "output H(s)"
    return Drawings(
        schematic=draw_schematic(
            design.circuit,
            title=title,
            supply=job.board.supply,
            subtitle=f"{design.form.replace('_', ' ')} form, order {job.target.order}, {sign}",
        ),
        blocks=draw_blocks(design.graph, title=title),
        bode=_bode(design, verification, title),
        noise=noise_plot(
            design.noise.frequency_hz, design.noise.density, title="Noise density at the output"
        ),
        step=_step(design, verification),
        swings=swing_chart(design.swings) if design.swings else "",
        drivers=_drivers(design),
    )


def one_line(text: str) -> str:
    """A title without control characters, on one line, not too long for a picture."""
    kept = "".join(c if c.isprintable() else " " for c in text)
    words = " ".join(kept.split())
    return words if len(words) <= LONGEST_TITLE else words[: LONGEST_TITLE - 1].rstrip() + "…"


def _bode(design: Design, verification: Verification, title: str) -> str:
    from netlist.plots import bode_plot

    simulated = verification.simulated if verification.failure is None else None
    if simulated is not None and verification.frequency_hz is not None:
        return bode_plot(
            verification.frequency_hz,
            design.wanted.response(verification.frequency_hz),
            simulated,
            tolerance=design.tolerance,
            accept=design.job.accept,
            title=title,
        )
    target = design.wanted.response(design.frequency_hz)
    error = design.nominal
    ratio = np.exp(error.magnitude_db / DB_PER_NEPER + 1j * np.radians(error.phase_deg))
    return bode_plot(
        design.frequency_hz,
        target,
        None,
        tolerance=design.tolerance,
        accept=design.job.accept,
        title=title,
        predicted=target * ratio,
    )


def _drivers(design: Design) -> str:
    from netlist.plots import driver_chart
    from netlist.report.boards import driver_remarks

    found = design.tolerance.drivers
    return driver_chart(found, remarks=driver_remarks(found, design.circuit)) if found else ""


def _step(design: Design, verification: Verification) -> str:
    from netlist.plots import step_plot

    if verification.step is None:
        return ""
    job = design.job
    return step_plot(
        verification.step.time_s,
        verification.step.voltages,
        rails=job.board.supply,
        output_net=design.circuit.output_net,
        title=f"Step of {job.signal.input_peak:g} V at the input",
    )
