"""What a job may ask of a choice beyond the least error: pairs, and few distinct values.

Pairs come first, since they decide which parts there are.
"""

from __future__ import annotations

from dataclasses import replace

from synth.choosing.choose import Choice
from synth.choosing.pairs import BINDING_SHARE, WORTHWHILE, Pair, Pairing, choose_with_pairs
from synth.choosing.sharing import Sharing, share_values
from synth.choosing.task import Task
from synth.job import Board

__all__ = ["refine"]


def refine(task: Task, choice: Choice, board: Board) -> Choice:
    """The choice with what `board` asks for, and notices that say what was done.

    `choice` is what came of `task`.
    """
    said: list[str] = []
    if board.pairs:
        paired = choose_with_pairs(task, choice)
        said += _of_pairs(paired)
        task, choice = paired.task, paired.choice
    if board.share_values:
        shared = share_values(task, choice)
        said.append(_of_sharing(shared))
        choice = shared.choice
    return replace(choice, notices=(*choice.notices, *said))


def _of_pairs(found: Pairing) -> list[str]:
    before = f"{found.share_before:.2g} times its limit"
    if not found.needed:
        return [
            f"no resistor became a pair, as single parts suffice: with them the error reaches "
            f"{before}, and no bound from their series is above {BINDING_SHARE:g} times the limits"
        ]
    if not found.pairs:
        return [
            f"no resistor became a pair: with single parts the error reaches {before}, and two "
            f"in the place of one do not bring it below {WORTHWHILE:g} of that"
        ]
    return [
        f"{_words(found.pairs)}: with single parts the error reaches {before}, with these "
        f"{found.share_after:.2g} times"
    ]


def _words(pairs: tuple[Pair, ...]) -> str:
    """ "R1 is two resistors in parallel, R1A and R1B; R4 ..." """
    return "; ".join(
        f"{pair.ref} is two resistors in {pair.how}, {pair.refs[0]} and {pair.refs[1]}"
        for pair in pairs
    )


def _of_sharing(found: Sharing) -> str:
    fewer = found.before - found.after
    if not fewer:
        return f"no fewer than {found.before} distinct values keep the error about where it is"
    before, after = 100 * found.share_before, 100 * found.share_after
    return (
        f"{fewer} fewer distinct values, {found.after} instead of {found.before}: the largest "
        f"error is {after:.2g} % of its limit instead of {before:.2g} %"
    )
