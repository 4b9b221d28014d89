"""Voltage levels and impedances: how large every signal is, and which C and R_f set it.

Input: a block graph, its signs, its peaks and the job.  Output: the same graph with signals in
volts, and the `Sizing` of every cell.  Called by
`synth.candidates` only.

Below the ceilings the levels first minimise the response error with the job's op-amp; then,
giving up next to nothing of it, the noise, with resistors and capacitors of comfortable size.
"""

from synth.scaling.levels import Scaled, scale

__all__ = ["Scaled", "scale"]
