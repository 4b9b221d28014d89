"""Realizations of H(s) as block graphs, one form a file, and the table of them.

A form takes a `TransferFunction` and returns a `BlockGraph` that equals it, with exact
rational weights.  A form that cannot realise a target raises `RealizationError` with the
reason.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from types import MappingProxyType

from synth.errors import JobError
from synth.forms.cascade import cascade
from synth.forms.controllable import controllable
from synth.forms.observable import observable
from synth.graph import BlockGraph
from synth.transfer import TransferFunction

__all__ = ["FORMS", "check_form_name", "realize"]

FORMS: Mapping[str, Callable[[TransferFunction], BlockGraph]] = MappingProxyType(
    {
        "controllable": controllable,
        "observable": observable,
        "cascade": cascade,
    }
)


def check_form_name(form: str) -> None:
    """Refuse a name that is neither a form nor ``"auto"``.

    Raises
    ------
    JobError
        Names the forms there are.
    """
    if form != "auto" and form not in FORMS:
        raise JobError(
            f"got {form!r}, expected auto, {', '.join(FORMS)}",
            key="board.form",
        )


def realize(target: TransferFunction, form: str) -> BlockGraph:
    """The block graph of `target` in the form of that name.

    Raises
    ------
    JobError
        No form of that name.
    RealizationError
        The form does not exist for this target.
    """
    check_form_name(form)
    return FORMS[form](target)
