"""Plots of the evidence as SVG texts, ready for a folder or for one page with others.

matplotlib is loaded when the first plot is drawn.  Equal arguments give equal bytes; the ids
of each plot start with its `prefix`, so that several can be inlined in one page.
"""

from __future__ import annotations

from netlist.plots.bode import bode_plot
from netlist.plots.drivers import driver_chart
from netlist.plots.noise import noise_plot
from netlist.plots.step import step_plot
from netlist.plots.swings import swing_chart

__all__ = ["bode_plot", "driver_chart", "noise_plot", "step_plot", "swing_chart"]
