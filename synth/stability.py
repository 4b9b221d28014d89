"""Whether a board is stable by itself: its poles against those of H(s).

Input: poles of boards as `NodalProgram.poles` gives them, and H(s).  Output: how many lie in the
right half-plane.  A response over the band shows nothing of an op-amp that oscillates beyond it,
and nothing of a resonance whose damping the op-amps have turned negative: |H| is the same on both
sides of the axis.  Called by `synth.checks`, `synth.bandwidth` and `synth.tolerance`.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from synth.evidence import Check
from synth.transfer import TransferFunction

__all__ = ["of_its_own", "poles_check", "poles_on_the_right", "right_of_target"]

Complex = NDArray[np.complex128]

# A pole counts as right of the axis when its real part is above this share of its modulus:
# eigenvalues of stiff boards are no more exact than that.
ROUNDING = 1e-9


def of_its_own(poles: Complex, target: TransferFunction) -> Complex:
    """The poles (boards, r) less those that stand for a pole of H(s) on the imaginary axis, which
    finite gain puts on either side of it; infinite in the place of these."""
    left = np.array(poles, dtype=np.complex128, copy=True)
    boards = np.arange(left.shape[0])
    for pole in target.poles[target.poles.real == 0]:
        distance = np.abs(left - pole)
        distance[~np.isfinite(distance)] = np.inf
        left[boards, np.argmin(distance, axis=1)] = np.inf
    return left


def poles_on_the_right(poles: Complex, target: TransferFunction) -> NDArray[np.intp]:
    """How many poles of each board lie in the right half-plane, shape (boards,), less what
    `of_its_own` leaves out; `poles` shape (boards, r) [rad/s]."""
    left = of_its_own(poles, target)
    with np.errstate(invalid="ignore"):
        right = np.isfinite(left) & (left.real > ROUNDING * np.abs(left))
    return np.asarray(np.sum(right, axis=1), dtype=np.intp)


def right_of_target(target: TransferFunction) -> int:
    """How many poles of H(s) itself lie in the right half-plane."""
    return int(np.sum(target.poles.real > 0))


def poles_check(poles: Complex, target: TransferFunction) -> Check:
    """The line of the verdict for one board with the poles (r,) [rad/s]: it may have as many in
    the right half-plane as H(s)."""
    found = int(poles_on_the_right(poles[None], target)[0])
    wanted = right_of_target(target)
    note = "of the board by itself, by the eigenvalues of its nodal equations"
    if found != wanted:
        left = of_its_own(poles[None], target)[0]
        left = left[np.isfinite(left)]
        fastest = left[int(np.argmax(left.real / np.abs(left)))]
        note = f"of the board by itself: it oscillates at about {abs(fastest) / (2 * np.pi):.4g} Hz"
        if found < wanted:
            note = f"of the board by itself; H(s) has {wanted}"
    return Check(
        "poles right of the axis", float(wanted), float(found), "poles", found == wanted, note
    )
