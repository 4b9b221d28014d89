"""Realizations of H(s) as block graphs, one form a file, and the table of them.

A form takes a `TransferFunction` and returns a `BlockGraph` that equals it, with exact
rational weights where the form has them.  A form that cannot realise a target raises
`RealizationError` with the reason, one line.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from types import MappingProxyType

from synth.errors import JobError
from synth.forms.balanced import balanced
from synth.forms.cascade import cascade
from synth.forms.controllable import controllable
from synth.forms.khn import khn
from synth.forms.leapfrog import leapfrog
from synth.forms.normal import normal
from synth.forms.observable import observable
from synth.forms.parallel import parallel
from synth.forms.schwarz import schwarz
from synth.forms.tow_thomas import tow_thomas
from synth.graph import BlockGraph
from synth.transfer import TransferFunction

__all__ = ["FORMS", "Form", "check_form_name", "realize"]


@dataclass(frozen=True, kw_only=True)
class Form:
    """A realization as the table knows it.

    Parameters
    ----------
    build
        From a proper H(s) to its block graph.
    exact
        Whether the weights are rationals that give H(s) identically, where its factors do;
        otherwise they are doubles.
    structural_zeros
        Whether zeros at the origin come from the structure; otherwise from sums that cancel,
        which every part's tolerance disturbs.
    summed_zeros
        Whether zeros elsewhere come from such sums: these cancel in part where roots lie
        decades apart, and the numbers are then as accurate as the summands.
    everywhere
        Whether the form exists for every proper H(s).
    """

    build: Callable[[TransferFunction], BlockGraph]
    exact: bool = True
    structural_zeros: bool = True
    summed_zeros: bool = False
    everywhere: bool = True


FORMS: Mapping[str, Form] = MappingProxyType(
    {
        "controllable": Form(build=controllable),
        "observable": Form(build=observable),
        "cascade": Form(build=cascade),
        "tow_thomas": Form(build=tow_thomas),
        "khn": Form(build=khn),
        "normal": Form(build=normal, structural_zeros=False),
        "parallel": Form(build=parallel, structural_zeros=False),
        "balanced": Form(build=balanced, exact=False, structural_zeros=False, everywhere=False),
        "schwarz": Form(build=schwarz, summed_zeros=True, everywhere=False),
        "leapfrog": Form(build=leapfrog, exact=False, everywhere=False),
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
    return FORMS[form].build(target)
