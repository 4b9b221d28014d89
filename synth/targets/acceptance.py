"""Whether H(s) can be built: what is refused, what cancels, and what its author should know.

Refusals are for a person: one line, with the frequencies in Hz and what to do instead.  A pole
and a zero that coincide cancel, with a notice.  A pole that does not decay is another matter: a
zero on top of it hides it from the response, not from whoever asked for it.  So an undamped or
growing pole needs `allow_unstable` even under a zero, and is cancelled only when the zero
lies on it exactly.  A pole at the origin, the integrator of every PI controller, is welcome.
"""

from __future__ import annotations

import math

from synth.errors import TargetError
from synth.targets.bounds import LARGEST_ORDER, TWO_PI, frequency_text, root_text
from synth.targets.cancellation import COINCIDENCE, cancelled
from synth.transfer import TransferFunction

__all__ = ["BAND_MARGIN", "accept"]

BAND_MARGIN = 2.0
"""A band misses a root that lies outside it by more than this factor."""


def accept(
    target: TransferFunction,
    *,
    allow_unstable: bool,
    band_hz: tuple[float, float],
    key: str = "target",
) -> tuple[TransferFunction, tuple[str, ...]]:
    """The target as it is to be built, and what its author should know.

    Parameters
    ----------
    target
        H(s) as stated.
    allow_unstable
        Whether poles in the right half-plane and pairs on the imaginary axis are meant.
    band_hz
        Lowest and highest frequency at which the response must hold [Hz].
    key
        Path in the job of what states the target, for messages.

    Returns
    -------
    TransferFunction
        `target` itself, or what is left of it after cancelling.
    tuple of str
        Notices, one sentence each.

    Raises
    ------
    TargetError
        H(s) is zero, constant, improper, unstable without leave, or of too high an order.
    """
    if not any(target.numerator):
        raise TargetError("H(s) is zero, expected a numerator", key=key)
    _refuse_improper(target, band_hz, key)
    if not allow_unstable:
        _refuse_unstable(target, key)
    reduced, notices = cancelled(target)
    if reduced.order == 0:
        cause = " once its poles and zeros have cancelled" if target.order else ""
        raise TargetError(
            f"H(s) is the constant {float(reduced.gain):.4g}{cause}, expected at least one pole",
            key=key,
        )
    if reduced.order > LARGEST_ORDER:
        raise TargetError(
            f"H(s) has {reduced.order} poles, expected at most {LARGEST_ORDER}", key=key
        )
    if reduced.poles_at_origin > 1:
        notices.append(
            f"H(s) has {reduced.poles_at_origin} poles at the origin: an offset grows faster than "
            "a ramp in the chain of integrators unless a loop around the board holds it"
        )
    notices += _missed_band(reduced, band_hz)
    return reduced, tuple(notices)


def _refuse_improper(target: TransferFunction, band_hz: tuple[float, float], key: str) -> None:
    missing = -target.relative_degree
    if missing <= 0:
        return
    highest = max(abs(target.zeros)) / float(TWO_PI)
    above = "the highest zero" if highest else "the band"
    start = highest or band_hz[1]
    raise TargetError(
        f"H(s) is improper, with {_count(len(target.zeros), 'zero')} and "
        f"{_count(target.order, 'pole')}; add {_count(missing, 'pole')} 5 to 20 times above "
        f"{above}, between {frequency_text(5 * start)} and {frequency_text(20 * start)} "
        "(common practice)",
        key=key,
    )


def _refuse_unstable(target: TransferFunction, key: str) -> None:
    growing = [f for f in target.pole_factors if any(r.real > 0 for r in f.roots)]
    ringing = [f for f in target.pole_factors if any(r.imag and not r.real for r in f.roots)]
    if not growing and not ringing:
        return
    what = "in the right half-plane" if growing else "on the imaginary axis"
    factors = growing or ringing
    frequencies = ", ".join(root_text(f).removesuffix(f" {what}") for f in factors)
    covered = any(
        abs(z - p) <= COINCIDENCE * abs(p) for f in factors for p in f.roots for z in target.zeros
    )
    hint = "; a zero that lies on it does not remove it, so leave both out" if covered else ""
    raise TargetError(
        f"H(s) has poles {what} ({frequencies}){hint}, expected only poles that decay, unless "
        "allow_unstable = true",
        key=key,
    )


def _missed_band(target: TransferFunction, band_hz: tuple[float, float]) -> list[str]:
    """A notice when every pole and zero away from the origin lies far outside the band."""
    low, high = band_hz[0] / BAND_MARGIN, band_hz[1] * BAND_MARGIN
    away = []
    for name, factors in (("pole", target.pole_factors), ("zero", target.zero_factors)):
        for factor in factors:
            for hz in (abs(r) / float(TWO_PI) for r in factor.roots if r):
                if low <= hz <= high:
                    return []
                away.append((math.log(low / hz if hz < low else hz / high), name, factor))
    if not away:
        return []
    _, name, factor = min(away, key=lambda entry: entry[0])
    return [
        f"no pole or zero between {frequency_text(low)} and {frequency_text(high)}, the band and "
        f"a factor of {BAND_MARGIN:g} beyond; the nearest is the {name} at {root_text(factor)}"
    ]


def _count(number: int, noun: str) -> str:
    if number == 0:
        return f"no {noun}"
    return f"{number} {noun}" if number == 1 else f"{number} {noun}s"
