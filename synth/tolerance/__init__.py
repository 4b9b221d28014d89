"""What part tolerance does: runs of boards drawn from a population, which limit they fail first
and what drives it, the loops around them, first-order spread, intervals of a yield, and the error
budget that names whose tighter grade would help most."""

from synth.tolerance.boards import drawn_values, run_boards, tolerances_of
from synth.tolerance.budget import error_budget, next_grade
from synth.tolerance.drawing import BoardSource
from synth.tolerance.interval import clopper_pearson
from synth.tolerance.loops import board_margins, loop_yield_check, run_loops
from synth.tolerance.makeup import check_networks, value_ranges
from synth.tolerance.spread import Spread, predicted_spread

__all__ = [
    "BoardSource",
    "Spread",
    "board_margins",
    "check_networks",
    "clopper_pearson",
    "drawn_values",
    "error_budget",
    "loop_yield_check",
    "next_grade",
    "predicted_spread",
    "run_boards",
    "run_loops",
    "tolerances_of",
    "value_ranges",
]
