"""What the worst board within tolerance does: a board that is that bad, and a bound no board
passes."""

from synth.worstcase.result import WorstCase, WorstError
from synth.worstcase.search import DEFAULT_WORK, worst_case

__all__ = ["DEFAULT_WORK", "WorstCase", "WorstError", "worst_case"]
