"""The budget against hand calculation, and its advice against runs of boards, part by part."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from synth.circuit import Circuit
from synth.evidence import DB_PER_NEPER, ResponseError, response_error
from synth.job import Accept
from synth.nodal import compile_circuit
from synth.population import Network, PartSpread, Population
from synth.tolerance import error_budget, next_grade, run_boards
from tests.circuits import integrator, near_ideal, state_variable, tow_thomas

BAND = np.geomspace(100.0, 20e3, 61)
MAGNITUDE = Accept(magnitude_db=0.5, phase_deg=90.0)


def at(circuit: Circuit, **tolerances: float) -> Circuit:
    """The circuit with some parts at other tolerances."""
    return replace(
        circuit,
        passives=tuple(
            replace(p, rule=replace(p.rule, tolerance=tolerances.get(p.ref, p.tolerance)))
            for p in circuit.passives
        ),
    )


def off(magnitude_db: float, count: int = BAND.size) -> ResponseError:
    return ResponseError(np.full(count, magnitude_db), np.zeros(count))


def budget_of(circuit: Circuit, magnitude_db: float = 0.0, accept: Accept = MAGNITUDE):
    program = compile_circuit(circuit)
    return error_budget(program, circuit, off(magnitude_db), BAND, accept=accept, seed=3)


def percentile(circuit: Circuit, boards: int = 8000) -> float:
    """error_95_db of a run of boards on the whole circuit, the response itself the target."""
    program = compile_circuit(circuit)
    run = run_boards(
        program, circuit, program.solve(BAND), BAND, accept=MAGNITUDE, boards=boards, seed=11
    )
    return run.error_95_db


def test_budget_of_an_integrator_is_that_of_its_rc() -> None:
    """|H| = 1/(w R C): the variance of ln|H| is (tol_R^2 + tol_C^2)/3 everywhere."""
    circuit = at(integrator(near_ideal()), R1=0.01, C1=0.05)
    spread = DB_PER_NEPER * math.sqrt((0.01**2 + 0.05**2) / 3)
    found = budget_of(circuit, magnitude_db=-0.1)
    assert (found.quantity, found.unit, found.limit) == ("magnitude", "dB", 0.5)
    assert found.spread == pytest.approx(spread, rel=1e-6)
    assert found.nominal == -0.1
    assert found.values_share == pytest.approx(0.1**2 / (0.1**2 + spread**2), rel=1e-6)
    assert found.values_share + found.tolerance_share == pytest.approx(1, rel=1e-12)
    assert [(s.cause, s.refs) for s in found.shares] == [("own", ("C1",)), ("own", ("R1",))]
    assert found.shares[1].share == pytest.approx(1 / 26, rel=1e-5)
    assert found.by_cause == {"parts": pytest.approx(1)}
    assert found.part.refs == ("C1",)
    assert (found.part.tolerance, found.part.grade) == (0.05, 0.02)
    tighter = DB_PER_NEPER * math.sqrt((0.01**2 + 0.02**2) / 3)
    assert found.part.spread == pytest.approx(tighter, rel=1e-6)


def test_shares_are_whole_and_of_the_tightest_frequency() -> None:
    """Second method: the spread there from drawn boards, not from derivatives."""
    circuit = tow_thomas(near_ideal(), damping=25e3)
    found = budget_of(circuit)
    assert sum(s.share for s in found.shares) == pytest.approx(1, rel=1e-9)
    program = compile_circuit(circuit)
    values = np.array([p.value for p in circuit.passives])
    drawn = np.random.default_rng(5).uniform(-1, 1, (4000, values.size))
    boards = values * (1 + drawn * [p.tolerance for p in circuit.passives])
    db = response_error(program.solve(BAND, values=boards), program.solve(BAND)).magnitude_db
    sigma = db.std(axis=0)
    assert found.frequency_hz == pytest.approx(BAND[np.argmax(sigma)], rel=0.1)
    assert found.spread == pytest.approx(sigma.max(), rel=0.06)


@pytest.mark.parametrize(
    ("circuit", "tolerances"),
    [
        (tow_thomas(near_ideal(), damping=30e3), {"C1": 0.02, "C2": 0.05}),
        (tow_thomas(near_ideal(), damping=30e3), {"C1": 0.01, "C2": 0.01, "R2": 0.05}),
        (state_variable(near_ideal()), {"C1": 0.02, "C2": 0.02, "R7": 0.05}),
        (state_variable(near_ideal()), {"C1": 0.05, "C2": 0.02}),
    ],
)
def test_tightening_the_named_part_helps_more_than_tightening_any_other(
    circuit: Circuit, tolerances: dict[str, float]
) -> None:
    """Second method: every part tightened in turn, and a run of boards of each circuit."""
    circuit = at(circuit, **tolerances)
    found = budget_of(circuit)
    reached = {}
    for part in circuit.passives:
        grade = next_grade(part.kind, part.tolerance)
        if grade is not None:
            reached[part.ref] = percentile(at(circuit, **{part.ref: grade}))
    assert found.part.refs == (min(reached, key=lambda ref: reached[ref]),)
    (named,) = found.part.refs
    assert reached[named] < percentile(circuit)
    assert found.error_95_db == pytest.approx(percentile(circuit), rel=0.06)
    assert found.part.error_95_db == pytest.approx(reached[named], rel=0.06)


def test_a_whole_kind_is_predicted_as_a_run_of_boards_finds_it() -> None:
    """All resistors, and all capacitors, at their next grade."""
    circuit = at(tow_thomas(near_ideal(), damping=20e3), C1=0.05, C2=0.02)
    found = {t.kind: t for t in budget_of(circuit).kinds}
    assert found["capacitor"].refs == ("C1", "C2")
    assert (found["capacitor"].tolerance, found["capacitor"].grade) == (0.05, 0.02)
    for kind in ("resistor", "capacitor"):
        grades = {
            p.ref: next_grade(p.kind, p.tolerance) for p in circuit.passives if p.kind == kind
        }
        expected = percentile(at(circuit, **grades))
        assert found[kind].error_95_db == pytest.approx(expected, rel=0.06)


def test_the_tighter_of_two_limits_decides() -> None:
    """A phase limit that is used up first makes it a budget of phase."""
    circuit = tow_thomas(near_ideal(), damping=20e3)
    found = budget_of(circuit, accept=Accept(magnitude_db=20.0, phase_deg=1.0))
    assert (found.quantity, found.unit, found.limit) == ("phase", "deg", 1.0)
    assert found.limit_share_95 > 1


def test_a_large_nominal_error_is_laid_to_the_choice_of_values() -> None:
    """1 dB off against a spread of hundredths."""
    circuit = at(integrator(near_ideal()), R1=0.001, C1=0.01)
    found = budget_of(circuit, magnitude_db=1.0)
    assert found.values_share > 0.99


def test_the_tightest_grades_leave_no_advice() -> None:
    """0.1 % resistors and 1 % capacitors."""
    found = budget_of(at(integrator(near_ideal()), R1=0.001, C1=0.01))
    assert found.part is None
    assert found.kinds == ()


def test_parts_without_tolerance_have_no_share() -> None:
    """Nothing varies: no spread, no shares, and no division by it."""
    found = budget_of(at(integrator(near_ideal()), R1=0.0, C1=0.0))
    assert found.shares == ()
    assert found.spread == 0
    assert (found.values_share, found.tolerance_share) == (0, 0)


@pytest.mark.parametrize(
    ("kind", "tolerance", "grade"),
    [
        ("resistor", 0.05, 0.02),
        ("resistor", 0.02, 0.01),
        ("resistor", 0.005, 0.001),
        ("resistor", 0.001, None),
        ("resistor", 0.012, 0.01),
        ("capacitor", 0.2, 0.1),
        ("capacitor", 0.01, None),
        ("capacitor", 0.0, None),
    ],
)
def test_next_grade_is_the_first_below(kind: str, tolerance: float, grade: float | None) -> None:
    assert next_grade(kind, tolerance) == grade


def test_the_budget_is_of_the_population() -> None:
    """Capacitors of one reel, resistors that are matched, drift and slow op-amps
    change sigma, the shares and what helps; what the budget says of the boards' 95th percentile is
    what a run of them finds."""
    slow = replace(near_ideal(), gain_bandwidth=5e6)
    circuit = at(tow_thomas(slow, damping=20e3), C1=0.02, C2=0.02)
    population = Population(
        resistors=PartSpread(distribution="normal"),
        capacitors=PartSpread(lot=0.8, temperature_coefficient=2e-4),
        networks=(Network(refs=("R1", "R3"), tolerance=0.001),),
        temperature=(-20.0, 80.0),
        gain_bandwidth_spread=0.3,
    )
    program = compile_circuit(circuit)
    found = error_budget(
        program, circuit, off(0.0), BAND, accept=MAGNITUDE, seed=3, population=population
    )
    assert sum(s.share for s in found.shares) == pytest.approx(1, rel=1e-9)
    assert found.by_cause.keys() == {"parts", "temperature", "op_amps"}
    causes = {(s.cause, s.refs) for s in found.shares}
    assert {("lot", ("C1", "C2")), ("temperature", ()), ("op_amp", ("U1", "U2", "U3"))} <= causes
    run = run_boards(
        program,
        circuit,
        program.solve(BAND),
        BAND,
        accept=MAGNITUDE,
        boards=8000,
        seed=11,
        population=population,
    )
    assert found.error_95_db == pytest.approx(run.error_95_db, rel=0.06)
    assert budget_of(circuit).by_cause.keys() == {"parts"}


def test_matched_parts_are_tightened_together() -> None:
    """The grade of a network is one of all its parts, however much less each of them is worth than
    a part beside it."""
    circuit = at(tow_thomas(near_ideal(), damping=20e3), C1=0.01, C2=0.01, R2=0.05)
    pair = Population(networks=(Network(refs=("R3", "R4", "R5"), tolerance=0.001),))
    found = error_budget(
        compile_circuit(circuit),
        circuit,
        off(0.0),
        BAND,
        accept=MAGNITUDE,
        seed=3,
        population=pair,
    )
    assert found.part.refs == ("R2",)
    tight = at(circuit, R2=0.001, R1=0.001, R6=0.001)
    found = error_budget(
        compile_circuit(tight), tight, off(0.0), BAND, accept=MAGNITUDE, seed=3, population=pair
    )
    assert found.part.refs == ("R3", "R4", "R5")
    assert found.part.spread < found.spread
