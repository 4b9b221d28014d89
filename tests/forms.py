"""What tests that run over the forms share: where a form exists, and how exact it can be."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from synth.errors import RealizationError
from synth.forms import FORMS, realize
from synth.graph import BlockGraph
from synth.transfer import TransferFunction

__all__ = ["exists", "largest_summand", "realized", "sizes_of_response"]


def exists(form: str, target: TransferFunction) -> bool:
    """Whether the target has the form; never False for one that exists everywhere."""
    try:
        realize(target, form)
    except RealizationError:
        if FORMS[form].everywhere:
            raise
        return False
    return True


def realized(target: TransferFunction, form: str) -> BlockGraph:
    """The graph; the test is skipped where the form does not exist for this target."""
    try:
        return realize(target, form)
    except RealizationError:
        if FORMS[form].everywhere:
            raise
        pytest.skip(f"no {form} form of this target")


def largest_summand(graph: BlockGraph, s: NDArray[np.complex128]) -> NDArray[np.float64]:
    """The largest |weight * signal| any adder adds up, as large as it arrives at the output; zero
    without adders."""
    signals = {"in": np.ones_like(s), **graph.signals(s)}
    injections = graph.injections(s)
    largest = np.zeros(s.shape)
    for adder in graph.adders:
        for term in adder.terms:
            part = float(term.weight) * signals[term.source] * injections[adder.name]
            largest = np.maximum(largest, np.abs(part))
    return largest


def sizes_of_response(
    graph: BlockGraph, response: NDArray[np.complex128], s: NDArray[np.complex128]
) -> NDArray[np.float64]:
    """What an error of the response is relative to: the response itself, or where zeros come
    from sums that cancel the largest summand there is, as rounding leaves it."""
    form = FORMS[graph.form]
    if form.structural_zeros and not form.summed_zeros:
        return np.abs(response)
    return np.maximum(np.abs(response), largest_summand(graph, s))
