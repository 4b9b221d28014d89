"""Checks of the arrays a caller hands in."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from synth.errors import CircuitError

__all__ = ["checked_columns", "checked_frequency", "common_boards"]

Real = NDArray[np.float64]


def checked_frequency(frequency_hz: ArrayLike) -> Real:
    """Frequencies as an array of shape (F,).

    Raises
    ------
    CircuitError
        A frequency that is negative or not finite, or not one axis.
    """
    frequency = np.atleast_1d(np.asarray(frequency_hz, dtype=float))
    if frequency.ndim != 1 or not (np.all(frequency >= 0) and np.all(np.isfinite(frequency))):
        raise CircuitError("got frequencies that are not one row of finite numbers from 0 upward")
    return frequency


def checked_columns(name: str, given: ArrayLike | None, nominal: Real) -> Real:
    """`given` as an array of shape (K,) or (boards, K), K the size of `nominal`.

    None stands for the nominal ones, and a scalar for all columns (but for ``"values"``).

    Raises
    ------
    CircuitError
        An array of another shape, or an element that is not positive and finite.
    """
    if given is None:
        return nominal
    array = np.asarray(given, dtype=float)
    if array.ndim == 0 and name != "values":
        array = np.full(nominal.size, float(array))
    if array.ndim not in (1, 2) or array.shape[-1] != nominal.size:
        raise CircuitError(
            f"got {name} of shape {array.shape}, expected ({nominal.size},) or "
            f"(boards, {nominal.size})"
        )
    if not (np.all(array > 0) and np.all(np.isfinite(array))):
        raise CircuitError(f"got {name} that are not all positive and finite")
    return array


def common_boards(*arrays: Real) -> int | None:
    """The number of boards the arrays agree on, None when none has an axis of boards."""
    boards = {array.shape[0] for array in arrays if array.ndim == 2}
    if len(boards) > 1:
        raise CircuitError(f"got arrays for {sorted(boards)} boards, expected one number of boards")
    return boards.pop() if boards else None
