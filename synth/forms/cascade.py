"""A cascade of first- and second-order sections.

Which zeros stand beside which poles, and in what order, is the best choice there is:
`synth.forms.chains` says by what measure.  Each section is a short observable chain, so its
zeros at the origin come from the structure.
"""

from __future__ import annotations

from synth.forms.sectionwise import in_cascade
from synth.graph import BlockGraph
from synth.transfer import TransferFunction

__all__ = ["cascade"]


def cascade(target: TransferFunction) -> BlockGraph:
    """The cascade form of a proper H(s), weights exact as far as the factors are."""
    return in_cascade("cascade", target)
