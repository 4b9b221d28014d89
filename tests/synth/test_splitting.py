"""Gains split over stages: equal to the target, as few as it takes, only where they must be."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest

from synth import candidates
from synth.candidates import sketch_form
from synth.design import design
from synth.errors import RealizationError
from synth.evidence import response_error
from synth.fixing import FixedParts
from synth.forms import FORMS, realize
from synth.graph import INPUT, Block, BlockGraph, Term
from synth.job import Job
from synth.nodal import compile_circuit
from synth.parts import PartRule
from synth.peaks import SignalPeaks, signal_peaks
from synth.polarity import choose_polarity
from synth.scaling import scale
from synth.scaling.constraints import Region, region
from synth.scaling.variables import Variables
from synth.splitting import added_stages, split_graphs, through_stage
from synth.transfer import Factor, TransferFunction
from tests.jobs import job_for, resistor_rule
from tests.strategies import butterworth

F = Fraction
BAND = (10.0, 1e4)
FREQUENCY = np.geomspace(*BAND, 60)
W = F(6283)


def narrow() -> PartRule:
    """10 to 100 kohm."""
    return replace(resistor_rule(), smallest=1e4, largest=1e5)


def amplifier(gain: int) -> TransferFunction:
    """A first-order low-pass at 1 kHz with a gain."""
    return TransferFunction.from_factors(gain * W, [], [Factor.real(-W)])


def amplifier_job(gain: int, *, form: str = "observable") -> Job:
    return job_for(
        amplifier(gain), BAND, form=form, resistors=narrow(), input_peak=min(1.0, 5 / gain)
    )


def narrow_band_pass() -> TransferFunction:
    """Three pairs of Q = 10 next to each other: a companion form has a spread of thousands."""
    poles = [Factor.pair(W * F(k, 100), 10) for k in (95, 100, 105)]
    return TransferFunction.from_factors((W / 10) ** 3, [Factor.real(0)] * 3, poles)


def peaks_of(graph: BlockGraph, job: Job) -> SignalPeaks:
    return signal_peaks(graph, job.target, band_hz=job.signal.band_hz, swing=job.signal.swing)


def limits_of(graph: BlockGraph, job: Job) -> Region:
    return region(Variables(graph), job, peaks_of(graph, job), FixedParts())


def refusal_of(graph: BlockGraph, job: Job) -> str:
    """What scaling says of a graph as it is."""
    with pytest.raises(RealizationError) as refused:
        scale(graph, choose_polarity(graph), job, peaks_of(graph, job), FREQUENCY)
    return str(refused.value)


@pytest.mark.parametrize(("gain", "stages"), [(5, 0), (50, 1), (500, 2), (5000, 3)])
def test_a_gain_gets_as_many_stages_as_ratios_of_ten_need(gain: int, stages: int) -> None:
    """Resistors of one decade: every stage and the integrator bring a factor of ten at most,
    and the integrator's loop takes part."""
    sketch = sketch_form(amplifier_job(gain), "observable", FREQUENCY)
    assert [b.name for b in sketch.graph.adders] == [f"g{k + 1}" for k in range(stages)]
    rule = narrow()
    for part in sketch.circuit.bought:
        if part.kind == "resistor":
            assert rule.smallest * 0.9999 <= part.value <= rule.largest * 1.0001
    np.testing.assert_allclose(
        sketch.graph.at(2j * np.pi * FREQUENCY),
        amplifier(gain).at(2j * np.pi * FREQUENCY),
        rtol=1e-9,
    )
    response = compile_circuit(sketch.circuit).solve(FREQUENCY)
    error = response_error(response, amplifier(gain).response(FREQUENCY))
    assert error.largest_db < 0.2


@pytest.mark.parametrize("form", ["controllable", "observable"])
def test_a_companion_form_of_large_spread_fits_with_stages(form: str) -> None:
    """Order 6 within one decade of resistors: refused before, now a circuit whose weights are
    those of the target in exact rationals."""
    job = job_for(narrow_band_pass(), (500.0, 2e3), resistors=narrow(), form=form)
    graph = realize(job.target, form)
    refusal = refusal_of(graph, job)
    found = next(split_graphs(graph, job, peaks_of(graph, job)))
    assert found.state_matrices() == graph.state_matrices()
    assert limits_of(graph, job).start()[1] < 0 <= limits_of(found, job).start()[1]
    sketch = sketch_form(job, form, np.geomspace(500.0, 2e3, 60))
    assert [b.name for b in sketch.graph.blocks] == [b.name for b in found.blocks]
    names = ", ".join(b.name for b in added_stages(found, graph))
    assert sketch.notices == (f"{names}: stages added to split gains; without them, {refusal}",)


@pytest.mark.parametrize("form", ["controllable", "observable"])
def test_one_stage_less_would_not_do(form: str) -> None:
    """Two stages are found; each of all the terms split by itself, and each source's terms split
    together, leave the linear program without a point."""
    job = job_for(narrow_band_pass(), (500.0, 2e3), resistors=narrow())
    graph = realize(job.target, form)
    found = next(split_graphs(graph, job, peaks_of(graph, job)))
    assert len(added_stages(found, graph)) == 2
    sources = {
        t.source: [b.name for b, _ in graph.readers(t.source)]
        for b in graph.blocks
        for t in b.terms
    }
    for source, readers in sources.items():
        for together in (*((r,) for r in readers), tuple(readers)):
            trial = through_stage(graph, source, together, "g1")
            assert limits_of(trial, job).start()[1] < 0


def test_a_split_board_meets_its_limits() -> None:
    """Standard values, every op-amp, and the notice with the numbers, for a gain of 500."""
    made = design(amplifier_job(500), boards=20)
    assert made.nominal.largest_db < 0.5
    assert made.nominal.largest_deg < 3.0
    assert all(c.passed for c in made.checks)
    (notice,) = (n for n in made.notices if "stages added" in n)
    assert notice.startswith("g1, g2: stages added to split gains; without them, board.resistors")
    assert "integrator x1 would need resistors from" in notice
    sets = {p.sets for p in made.circuit.bought}
    assert "stage g1 for b0, input into x1" in sets
    assert "level of g2" in sets


def test_what_no_stage_can_mend_is_refused_with_the_numbers_as_before() -> None:
    """A gain of 1e9, and values that no ratio of parts brings into range."""
    job = amplifier_job(10**9)
    refusal = refusal_of(realize(job.target, "observable"), job)
    with pytest.raises(RealizationError) as refused:
        sketch_form(job, "observable", FREQUENCY)
    assert str(refused.value) == refusal
    assert "would need resistors" in refusal


@pytest.mark.parametrize("form", FORMS)
def test_what_fits_is_left_alone(form: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """No split is so much as looked for."""

    def never(*_: object) -> None:
        raise AssertionError("asked for a split")

    monkeypatch.setattr(candidates, "split_graphs", never)
    sketch = sketch_form(job_for(butterworth(3, 1e3), BAND), form, FREQUENCY)
    assert sketch.notices == ()
    assert [b.name for b in sketch.graph.blocks] == [
        b.name for b in realize(butterworth(3, 1e3), form).blocks
    ]


def test_a_stage_inverts_so_an_inverter_of_its_source_goes() -> None:
    """x2 reads x1 with the sign that needs an inverter; through the stage it needs none."""
    graph = BlockGraph(
        "any",
        (
            Block("x1", "integrator", (Term(INPUT, -W), Term("x1", -W))),
            Block("x2", "integrator", (Term("x1", W), Term("x2", -W))),
        ),
        "x2",
    )
    assert len(choose_polarity(graph).inverters) == 1
    through = through_stage(graph, "x1", ("x2",), "g1")
    assert choose_polarity(through).inverters == ()
    assert through.state_matrices() == graph.state_matrices()


def test_terms_of_one_source_share_a_stage() -> None:
    """Both readers, one adder before the first of them."""
    graph = realize(butterworth(3, 1e3), "observable")
    through = through_stage(graph, "x3", ("x1", "x2"), "g1")
    assert [b.name for b in through.blocks] == ["g1", "x1", "x2", "x3"]
    assert {b.name for b, _ in through.readers("x3")} == {"g1", "x3"}
    assert through.state_matrices() == graph.state_matrices()


@pytest.mark.parametrize("gain", [5, 9, 50, 5000])
def test_room_is_the_margin_where_something_fits_and_a_shortfall_where_not(gain: int) -> None:
    """The same linear program two ways; only rows with a price, made wider, give more room."""
    job = amplifier_job(gain)
    limits = limits_of(realize(job.target, "observable"), job)
    room, names = limits.room()
    _, margin = limits.start()
    assert (room >= 0) == (margin >= 0)
    if margin >= 0:
        assert room == pytest.approx(margin, abs=1e-9)
    for row, name in enumerate(limits.names):
        wider = replace(
            limits,
            lower=limits.lower - 0.1 * (np.arange(limits.lower.size) == row),
            upper=limits.upper + 0.1 * (np.arange(limits.upper.size) == row),
        )
        grown = wider.room()[0] - room
        assert grown >= -1e-9
        assert grown < 1e-9 or name in names


def test_references_of_a_split_circuit_can_be_fixed() -> None:
    """They are those of the circuit with its stages, as one sees it with nothing fixed."""
    job = amplifier_job(50)
    plain = sketch_form(job, "observable", FREQUENCY).circuit
    fixed = replace(job, board=replace(job.board, fixed=(("R2", 68e3),)))
    sketch = sketch_form(fixed, "observable", FREQUENCY)
    assert plain.by_ref["R2"].sets == "level of g1"
    assert sketch.circuit.by_ref["R2"].value == 68e3
    assert sketch.circuit.by_ref["R2"].fixed
    assert [p.nets for p in sketch.circuit.passives] == [p.nets for p in plain.passives]
    assert sketch.notices
