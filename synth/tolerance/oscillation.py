"""Which boards of a run are unstable by themselves.

The poles of every board would take longer than its response over a band.  First-order slopes about
the nominal board tell which boards come closest to the axis; those are solved exactly, closest
first, until several batches in a row have theirs where H(s) has them.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from synth.nodal import NodalProgram
from synth.stability import of_its_own, poles_on_the_right, right_of_target
from synth.tolerance.drawing import Drawn
from synth.transfer import TransferFunction

__all__ = ["OscillationWatch"]

# Boards of a block solved at a time, and after how many such batches without a find it stops: the
# order is to first order only.
BATCH = 32
CLEAN_BATCHES = 3


class OscillationWatch:
    """Looks for boards of one circuit, compiled as `program`, whose poles lie right of the axis
    where those of H(s) = `target` do not."""

    def __init__(self, program: NodalProgram, target: TransferFunction) -> None:
        self._program, self._target = program, target
        poles, slopes = program.pole_slopes()
        own = of_its_own(poles[None], target)[0]
        # Poles that are wanted on the right say nothing of those that are not.
        for wanted in target.poles[target.poles.real > 0]:
            distance = np.where(np.isfinite(own), np.abs(own - wanted), np.inf)
            own[int(np.argmin(distance))] = np.inf
        used = np.isfinite(own) & np.all(np.isfinite(slopes), axis=1)
        self._damping = -own[used].real / np.abs(own[used])
        self._slopes = -slopes[used].real / np.abs(own[used])[:, None]
        structure = program.structure
        self._nominal = np.log(np.concatenate([structure.values, structure.gain_bandwidth]))

    def excess(self, drawn: Drawn) -> NDArray[np.intp]:
        """By board, how many poles lie right of the axis beyond those of H(s), shape (boards,)."""
        found = np.zeros(drawn.values.shape[0], dtype=np.intp)
        order = np.argsort(self._predicted(drawn), kind="stable")
        clean = 0
        for start in range(0, order.size, BATCH):
            batch = order[start : start + BATCH]
            gain_bandwidth = drawn.gain_bandwidth
            poles = self._program.poles(
                values=drawn.values[batch],
                gain_bandwidth=None if gain_bandwidth is None else gain_bandwidth[batch],
            )
            found[batch] = poles_on_the_right(poles, self._target) - right_of_target(self._target)
            clean = 0 if found[batch].any() else clean + 1
            if clean == CLEAN_BATCHES:
                break
        return found

    def _predicted(self, drawn: Drawn) -> NDArray[np.float64]:
        """Least damping ratio of any pole of each board, to first order."""
        count = drawn.values.shape[1]
        change = np.log(drawn.values) - self._nominal[:count]
        damping = self._damping + change @ self._slopes[:, :count].T
        if drawn.gain_bandwidth is not None:
            change = np.log(drawn.gain_bandwidth) - self._nominal[count:]
            damping += change @ self._slopes[:, count:].T
        return np.asarray(np.min(damping, axis=1, initial=1.0))
