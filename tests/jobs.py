"""Jobs for tests: the default board around any target."""

from __future__ import annotations

from dataclasses import replace

from synth.job import Accept, Board, Job, Signal
from synth.op_amps import OP_AMP_CLASSES
from synth.parts import PartRule
from synth.transfer import TransferFunction

__all__ = ["capacitor_rule", "job_for", "resistor_rule"]


def resistor_rule(series: str = "E96", tolerance: float = 0.01) -> PartRule:
    """1 kohm to 1 Mohm."""
    return PartRule(kind="resistor", series=series, tolerance=tolerance, smallest=1e3, largest=1e6)


def capacitor_rule(series: str = "E12", tolerance: float = 0.05) -> PartRule:
    """100 pF to 1 uF."""
    return PartRule(
        kind="capacitor", series=series, tolerance=tolerance, smallest=100e-12, largest=1e-6
    )


def job_for(
    target: TransferFunction,
    band_hz: tuple[float, float],
    *,
    form: str = "controllable",
    inverted: str = "no",
    resistors: PartRule | None = None,
    capacitors: PartRule | None = None,
    op_amp: str = "general purpose",
    accept: Accept | None = None,
    op_amp_figures: dict[str, float] | None = None,
    **signal: object,
) -> Job:
    """A job with the default board unless told otherwise, in a form of its own: comparing all of
    them takes time."""
    figures = replace(OP_AMP_CLASSES[op_amp], **(op_amp_figures or {}))
    return Job(
        target=target,
        signal=Signal(band_hz=band_hz, **signal),
        board=Board(
            op_amp=figures,
            resistors=resistors or resistor_rule(),
            capacitors=capacitors or capacitor_rule(),
            form=form,
            inverted=inverted,
        ),
        accept=accept or Accept(),
    )
