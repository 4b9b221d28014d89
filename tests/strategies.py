"""Random targets, for property tests and for fixed seeds."""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
from hypothesis import strategies as st

from synth.errors import RealizationError
from synth.forms import FORMS, realize
from synth.transfer import Factor, TransferFunction

__all__ = ["butterworth", "exists", "random_target", "targets"]


def butterworth(order: int, corner_hz: float, *, highpass: bool = False) -> TransferFunction:
    """A Butterworth low-pass or high-pass of unit gain."""
    w0 = 2 * math.pi * corner_hz
    poles = [
        Factor.pair(w0, 1 / (2 * math.sin(math.pi * (2 * k + 1) / (2 * order))))
        for k in range(order // 2)
    ]
    if order % 2:
        poles.append(Factor.real(-w0))
    if highpass:
        return TransferFunction.from_factors(1, [Factor.real(0)] * order, poles)
    return TransferFunction.from_factors(Fraction(w0) ** order, [], poles)


def exists(form: str, target: TransferFunction) -> bool:
    """Whether the target has that form; only one said not to be everywhere may be missing."""
    try:
        realize(target, form)
    except RealizationError:
        assert not FORMS[form].everywhere
        return False
    return True


def random_target(
    rng: np.random.Generator, order: int, *, decades: float = 6.0, from_hz: float = 0.1
) -> TransferFunction:
    """A stable target with roots spread over decades; zeros anywhere, the origin too."""

    def frequency() -> float:
        return float(2 * math.pi * from_hz * 10 ** rng.uniform(0, decades))

    poles: list[Factor] = []
    left = order
    while left:
        if left >= 2 and rng.random() < 0.5:
            poles.append(Factor.pair(frequency(), float(rng.uniform(0.6, 20))))
            left -= 2
        else:
            poles.append(Factor.real(-frequency()))
            left -= 1
    zeros: list[Factor] = []
    left = int(rng.integers(0, order + 1))
    while left:
        draw = rng.random()
        if left >= 2 and draw < 0.4:
            zeros.append(Factor.pair(frequency(), float(rng.uniform(0.6, 20))))
            left -= 2
            continue
        root = 0.0 if draw > 0.8 else frequency() * (1 if draw > 0.7 else -1)
        zeros.append(Factor.real(root))
        left -= 1
    # A gain of order one where the response is largest.
    plain = TransferFunction.from_factors(1, zeros, poles)
    largest = np.max(np.abs(plain.response(from_hz * np.geomspace(0.1, 10 ** (decades + 1), 200))))
    return TransferFunction.from_factors(float(rng.uniform(0.1, 10) / largest), zeros, poles)


@st.composite
def targets(
    draw: st.DrawFn, *, orders: tuple[int, int] = (1, 8), decades: float = 2.0
) -> TransferFunction:
    """Stable targets as hypothesis draws them."""
    order = draw(st.integers(*orders))
    seed = draw(st.integers(0, 2**32 - 1))
    return random_target(np.random.default_rng(seed), order, decades=decades, from_hz=10.0)
