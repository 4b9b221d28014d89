"""Sharing takes values away, stays within its allowance, and takes as many as can be taken."""

from __future__ import annotations

import itertools
from dataclasses import replace

import numpy as np
import pytest

from synth.candidates import sketch_form
from synth.choosing.model import Level
from synth.choosing.sharing import (
    ALLOWED_RATIO,
    ALLOWED_SHARE,
    distinct_values,
    share_values,
)
from synth.choosing.task import Task
from synth.circuit import Circuit
from synth.evidence import response_error
from synth.job import Accept
from synth.nodal import compile_circuit
from synth.parts import PartRule, StockItem
from synth.transfer import Factor, TransferFunction
from tests.jobs import job_for
from tests.strategies import butterworth

BAND = (100.0, 2e3)
FREQUENCY = np.geomspace(*BAND, 41)


def task_of(target: TransferFunction, form: str, **options) -> Task:
    accept = options.pop("accept", Accept())
    effort = options.pop("effort", 6_000_000)
    job = job_for(target, BAND, form=form, accept=accept, **options)
    circuit = sketch_form(job, form, FREQUENCY).circuit
    response = target.response(FREQUENCY)
    return Task(
        circuit=circuit, target=response, frequency_hz=FREQUENCY, accept=accept, effort=effort
    )


NOTCH = TransferFunction.from_factors(
    4e4 * np.pi,
    [Factor.pair(2e3 * np.pi, 20.0)],
    [Factor.pair(2e3 * np.pi, 2.0), Factor.real(-4e4 * np.pi)],
)


def largest_share(task: Task, circuit: Circuit) -> float:
    """The largest error over its limit, magnitude or phase, from the response itself."""
    error = response_error(compile_circuit(circuit).solve(FREQUENCY), task.target)
    return max(
        error.largest_db / task.accept.magnitude_db, error.largest_deg / task.accept.phase_deg
    )


@pytest.mark.parametrize("target", [butterworth(4, 1e3), butterworth(6, 1e3), NOTCH])
def test_far_fewer_values_at_an_error_within_the_allowance(target: TransferFunction) -> None:
    """Two Butterworth cascades and a notch, whose error stands in a narrow peak: two thirds of the
    values at most, and the largest error, which the verdict rests on, within what is promised."""
    task = task_of(target, "cascade")
    choice = task.choose()
    found = share_values(task, choice)
    assert found.before == len(distinct_values(choice.circuit))
    assert found.after == len(distinct_values(found.choice.circuit)) <= 2 / 3 * found.before
    before = largest_share(task, choice.circuit)
    after = largest_share(task, found.choice.circuit)
    assert after <= max(ALLOWED_RATIO * before, ALLOWED_SHARE) * (1 + 1e-9)
    assert found.share_before == pytest.approx(before, rel=1e-6)
    assert found.share_after == pytest.approx(after, rel=1e-6)
    known = found.choice.certificate
    assert known.unshared == choice.certificate
    assert known.lower_bound == choice.certificate.lower_bound
    for part in found.choice.circuit.bought:
        assert part.value in part.rule.values
    assert share_values(task, choice).choice.circuit == found.choice.circuit


def test_op_amp_ceilings_hold_after_sharing() -> None:
    """With no output allowed above its level by more than 1 %, none is."""
    plain = task_of(butterworth(4, 1e3), "cascade")
    nets = [a.output for a in plain.circuit.amplifiers if a.output != "out"]
    levels = np.abs(compile_circuit(plain.circuit).solve(FREQUENCY, nets=nets))
    peaks = {
        net: Level(float(FREQUENCY[int(np.argmax(levels[:, k]))]), 1.01)
        for k, net in enumerate(nets)
    }
    task = replace(plain, level_limits=peaks)
    found = share_values(task, task.choose())
    assert found.after < found.before
    after = np.abs(compile_circuit(found.choice.circuit).solve(FREQUENCY, nets=nets))
    assert np.all(after.max(axis=0) <= 1.02 * levels.max(axis=0))


@pytest.mark.parametrize("tight", [False, True])
def test_no_choice_has_fewer_values_where_all_can_be_tried(tight: bool) -> None:
    """A first-order board: every combination solved by the nodal engine."""
    target = TransferFunction.from_factors(-2e3, [], [Factor.real(-3e3)])
    accept = Accept(magnitude_db=0.05, phase_deg=0.3) if tight else Accept()
    rules = {
        f"{kind}s": PartRule(kind=kind, series="E12", tolerance=0.01, smallest=low, largest=high)
        for kind, low, high in (("resistor", 4.7e3, 47e3), ("capacitor", 3.3e-9, 33e-9))
    }
    task = task_of(target, "observable", accept=accept, **rules)
    choice = task.choose()
    found = share_values(task, choice)
    every = np.array(list(itertools.product(*task.grid.values)))
    kinds = [p.kind for p in task.circuit.passives]
    chosen = largest_share(task, choice.circuit)
    most = min(max(ALLOWED_RATIO * chosen, ALLOWED_SHARE), max(1.0, chosen))
    allowed = task.shares(every) <= most * (1 + 1e-9)
    counts = [len(set(zip(kinds, row, strict=True))) for row in every[allowed].tolist()]
    assert found.after == min(counts)


def test_values_fixed_by_hand_stay() -> None:
    task = task_of(butterworth(2, 1e3), "cascade")
    ref = next(p.ref for p in task.circuit.passives if p.kind == "capacitor")
    parts = tuple(
        replace(p, fixed=True, value=6.8e-9) if p.ref == ref else p for p in task.circuit.passives
    )
    task = task.with_circuit(replace(task.circuit, passives=parts))
    found = share_values(task, task.choose())
    assert found.choice.circuit.by_ref[ref].value == 6.8e-9


def test_no_value_is_used_more_often_than_the_drawer_holds_it() -> None:
    """Two of each resistor: sharing goes as far as two of a kind, and further without counts."""
    task = task_of(butterworth(4, 1e3), "cascade")
    choice = task.choose()

    def most_used(found: Circuit) -> int:
        values = [p.value for p in found.bought if p.kind == "resistor"]
        return max(values.count(v) for v in values)

    rule = next(p.rule for p in task.circuit.bought if p.kind == "resistor")
    stock = tuple(StockItem(value=float(v), tolerance=0.01, count=2) for v in rule.values)
    parts = tuple(
        replace(p, rule=replace(rule, stock=stock)) if p.kind == "resistor" else p
        for p in task.circuit.passives
    )
    counted = task.with_circuit(replace(task.circuit, passives=parts))
    assert most_used(choice.circuit) <= 2
    assert most_used(share_values(task, choice).choice.circuit) > 2
    found = share_values(counted, choice)
    assert most_used(found.choice.circuit) == 2
    assert found.after < found.before
