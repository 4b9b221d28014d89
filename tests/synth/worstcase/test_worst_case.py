"""The worst board within tolerance: a bound that no board passes, and a board that comes near."""

from __future__ import annotations

import itertools
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.candidates import sketch_form
from synth.circuit import Circuit
from synth.errors import CircuitError, PolewrightError
from synth.evidence import DB_PER_NEPER, response_error
from synth.grid import judging_frequencies
from synth.nodal import compile_circuit
from synth.population import Network, PartSpread, Population
from synth.tolerance import drawn_values, value_ranges
from synth.worstcase import WorstCase, WorstError, worst_case
from tests.circuits import (
    amplifier,
    figures,
    leaky_integrator,
    multiple_feedback,
    near_ideal,
    part,
    rc,
    tow_thomas,
)
from tests.jobs import capacitor_rule, job_for
from tests.strategies import butterworth, random_target


def toleranced(circuit: Circuit, **grades: float) -> Circuit:
    """The circuit with tolerances for the named parts, 0 for all others."""
    parts = tuple(replace(p, grade=grades.get(p.ref, 0.0)) for p in circuit.passives)
    return replace(circuit, passives=parts)


def errors(circuit: Circuit, values, target, frequency):
    """Largest size of the errors of many boards over the band, each shape (boards,)."""
    found = response_error(compile_circuit(circuit).solve(frequency, values=values), target)
    return (np.abs(e).max(axis=1) for e in (found.magnitude_db, found.phase_deg))


def corners(circuit: Circuit):
    """Every combination of ends, shape (2^P, P)."""
    return np.array(
        list(
            itertools.product(
                *(
                    (p.value * (1 - p.tolerance), p.value * (1 + p.tolerance))
                    for p in circuit.passives
                )
            )
        )
    )


def assert_holds(found: WorstCase, circuit: Circuit, values, target, frequency):
    """No board passes the bounds, and none of the named boards is worse than what is said."""
    largest = errors(circuit, values, target, frequency)
    for error, size in zip((found.magnitude_db, found.phase_deg), largest, strict=True):
        assert error.bound is None or size.max() <= error.bound
        assert error.bound is None or error.reached <= error.bound
        # What is reached is reached by that board, at that frequency, with that sign.
        board = circuit.with_values(error.values)
        for one in circuit.passives:
            off = abs(board.by_ref[one.ref].value / one.value - 1)
            assert off <= one.tolerance * (1 + 1e-9)
        at = np.flatnonzero(frequency == error.frequency_hz)
        again = response_error(compile_circuit(board).solve(frequency[at]), target[at])
        value = again.magnitude_db if error.unit == "dB" else again.phase_deg
        assert error.sign * value[0] == pytest.approx(error.reached, rel=1e-7, abs=1e-9)


def test_the_extreme_inside_the_box_is_found_where_no_corner_shows_it():
    """A band-pass of Q = 10 measured at its nominal f0 with f0 off by +-2 % gives 0.927, 1.000,
    0.930: against a target of 0.9 the error is largest for the board in the middle."""
    low, high = 1.02**-2, 0.98**-2
    tolerance, middle = (high - low) / (high + low), (high + low) / 2
    circuit = replace(
        toleranced(tow_thomas(near_ideal(), C=1e-9, damping=100e3), R4=tolerance),
        output_net="x1",
    ).with_values({"R1": 100e3, "R4": 10e3 * middle})
    circuit = toleranced(circuit, R4=tolerance)
    frequency = np.array([1 / (2 * np.pi * 10e3 * 1e-9)])
    ends = compile_circuit(circuit).solve(frequency, values=corners(circuit))
    # Which end of R4 is which side of f0: a small resistance makes f0 high.
    assert sorted({round(float(abs(h)), 3) for h in ends.ravel()}) == [0.927, 0.93]
    target = 0.9 * compile_circuit(circuit.with_values({"R4": 10e3})).solve(frequency)
    found = worst_case(circuit, target, frequency).magnitude_db
    assert found.reached == pytest.approx(20 * np.log10(1 / 0.9), rel=1e-5)
    assert found.values["R4"] == pytest.approx(10e3, rel=1e-4)
    assert found.between == ("R4",)
    assert found.reached <= found.bound <= 1.02 * found.reached
    # Against a target of 1 the ends are worst, the lower f0 more so than the upper.
    found = worst_case(circuit, target / 0.9, frequency).magnitude_db
    assert (found.sign, found.low) == (-1, ("R4",))
    assert found.reached == pytest.approx(-20 * np.log10(abs(ends).min()), rel=1e-6)


def test_a_corner_frequency_follows_its_formula():
    """1/(1 + s R C) hangs on R C alone, 0.99 * 0.95 to 1.01 * 1.05 of its nominal value."""
    frequency = np.array([100.0, 1e3, 1e4])
    x = 2 * np.pi * frequency * 1e-4
    found = worst_case(rc(), 1 / (1 + 1j * x), frequency)
    product = np.array([[0.99 * 0.95], [1.01 * 1.05]])
    ln = np.log((1 + x**2) / (1 + (x * product) ** 2)) / 2
    turn = np.degrees(np.arctan(x) - np.arctan(x * product))
    for error, exact in ((found.magnitude_db, DB_PER_NEPER * ln), (found.phase_deg, turn)):
        assert error.reached == pytest.approx(np.abs(exact).max(), rel=1e-9)
        assert error.reached <= error.bound <= 1.02 * error.reached


@pytest.mark.parametrize(
    "circuit",
    [
        leaky_integrator(figures()),
        multiple_feedback(figures()),
        tow_thomas(figures()),
        tow_thomas(figures(), damping=100e3),
    ],
    ids=["leaky", "multiple feedback", "Tow-Thomas", "Tow-Thomas, Q = 10"],
)
def test_every_corner_and_many_boards_inside_stay_below_the_bound(circuit):
    frequency = np.geomspace(2e3, 5e4, 41)
    target = compile_circuit(circuit).solve(frequency)
    found = worst_case(circuit, target, frequency)
    generator = np.random.default_rng(5)
    inside = drawn_values(circuit, 2000, int(generator.integers(2**31)))
    boards = np.vstack([corners(circuit), inside])
    assert_holds(found, circuit, boards, target, frequency)
    for error, size in zip(
        (found.magnitude_db, found.phase_deg),
        errors(circuit, boards, target, frequency),
        strict=True,
    ):
        assert error.meets
        assert error.reached >= size.max() * (1 - 1e-6)


@settings(max_examples=6, deadline=None)
@given(seed=st.integers(0, 2**32 - 1), order=st.integers(1, 3))
def test_boards_of_any_target_stay_below_the_bound(seed, order):
    """Ends and values between, of targets with poles and zeros of any Q up to 20."""
    generator = np.random.default_rng(seed)
    target = random_target(generator, order, decades=1.5, from_hz=100.0)
    band = (50.0, 5e3)
    frequency = judging_frequencies(target, band)[::4]
    try:
        circuit = sketch_form(job_for(target, band), "cascade", frequency).circuit
    except PolewrightError:
        return
    wanted = target.response(frequency)
    found = worst_case(circuit, wanted, frequency, work=100_000)
    boards = drawn_values(circuit, 300, int(generator.integers(2**31)))
    nominal = np.array([p.value for p in circuit.passives])
    tolerance = np.array([p.tolerance for p in circuit.passives])
    ends = nominal * (1 + tolerance * generator.choice([-1.0, 1.0], boards.shape))
    assert_holds(found, circuit, np.vstack([boards, ends]), wanted, frequency)


def test_no_board_of_a_population_with_temperatures_passes_the_bound():
    """Nor a board whose parts stand at the ends of tolerance and temperature; some pass the bound
    of tolerance alone."""
    target, band = butterworth(3, 1e3), (100.0, 2e3)
    frequency = judging_frequencies(target, band)
    circuit = sketch_form(job_for(target, band), "cascade", frequency).circuit
    circuit = circuit.with_values({p.ref: p.ideal for p in circuit.passives})
    wanted = compile_circuit(circuit).solve(frequency)
    population = Population(
        resistors=PartSpread(temperature_coefficient=2e-4),
        capacitors=PartSpread(temperature_coefficient=8e-4),
        networks=(Network(refs=("R1", "R2"), tolerance=0.001, tracking=1e-5),),
        temperature=(-40.0, 125.0),
    )
    ranges = value_ranges(circuit, population)
    found = worst_case(circuit, wanted, frequency, ranges=ranges)
    plain = worst_case(circuit, wanted, frequency)
    nominal = np.array([p.value for p in circuit.passives])
    ends = np.random.default_rng(1).integers(0, 2, (2000, nominal.size))
    extreme = nominal * ranges[ends, np.arange(nominal.size)]
    boards = np.vstack([drawn_values(circuit, 2000, 1, population), extreme])
    assert np.all(boards[:2000] >= nominal * ranges[0] * (1 - 1e-12))
    assert np.all(boards[:2000] <= nominal * ranges[1] * (1 + 1e-12))
    for worst, size in zip(
        (found.magnitude_db, found.phase_deg),
        errors(circuit, boards, wanted, frequency),
        strict=True,
    ):
        assert np.max(size) <= worst.bound
        assert worst.reached <= worst.bound
    db, _ = errors(circuit, boards[:2000], wanted, frequency)
    assert np.max(db) > plain.magnitude_db.bound


def test_ranges_that_do_not_fit_are_refused():
    with pytest.raises(CircuitError, match="ranges of shape"):
        worst_case(rc(), [0.5], [100.0], ranges=[[0.9], [1.1]])
    with pytest.raises(CircuitError, match="ranges of shape"):
        worst_case(rc(), [0.5], [100.0], ranges=[[-0.1, 1], [1.1, 1]])


@pytest.mark.parametrize("form", ["cascade", "controllable"])
@pytest.mark.parametrize("tolerance", [0.01, 0.05])
def test_bound_and_reached_meet_at_order_four(form, tolerance):
    target, band = butterworth(4, 1e3), (100.0, 2e3)
    frequency = judging_frequencies(target, band)
    job = job_for(target, band, capacitors=capacitor_rule(tolerance=tolerance))
    circuit = sketch_form(job, form, frequency).circuit
    wanted = compile_circuit(circuit).solve(frequency)
    found = worst_case(circuit, wanted, frequency)
    assert found.magnitude_db.bound <= 1.05 * found.magnitude_db.reached
    assert found.phase_deg.bound <= 1.05 * found.phase_deg.reached
    assert found.magnitude_db.meets and found.phase_deg.meets
    # Between the frequencies of the grid the worst boards are hardly worse.
    fine = np.geomspace(*band, 20 * frequency.size)
    nominal = compile_circuit(circuit).solve(fine)
    worst = compile_circuit(circuit.with_values(found.magnitude_db.values)).solve(fine)
    largest = response_error(worst, nominal).largest_db
    assert largest == pytest.approx(found.magnitude_db.reached, rel=0.01)
    generator = np.random.default_rng(1)
    assert_holds(
        found,
        circuit,
        drawn_values(circuit, 200, int(generator.integers(2**31))),
        wanted,
        frequency,
    )


@pytest.mark.parametrize(
    ("seed", "form", "tolerances"),
    [
        (4001, "tow_thomas", (0.05, 0.05)),
        (4001, "controllable", (0.01, 0.05)),
        (4000, "schwarz", (0.01, 0.05)),
        (4001, "balanced", (0.001, 0.01)),
    ],
)
def test_sharp_resonances_of_order_four_are_bounded(seed, form, tolerances):
    """Q of 5 to 12: the series diverges over the box, a resonance sweeps far past."""
    band = (50.0, 5e3)
    target = random_target(np.random.default_rng(seed), 4, decades=1.5, from_hz=100.0)
    grid = judging_frequencies(target, band)
    circuit = sketch_form(job_for(target, band), form, grid).circuit
    circuit = toleranced(
        circuit,
        **{p.ref: tolerances[p.kind == "capacitor"] for p in circuit.passives},
    )
    frequency = grid[::3]
    wanted = compile_circuit(circuit).solve(frequency)
    found = worst_case(circuit, wanted, frequency)
    assert found.magnitude_db.meets
    assert found.phase_deg.meets
    drawn = drawn_values(circuit, 200, seed)
    nominal = np.array([p.value for p in circuit.passives])
    spread = np.array([p.tolerance for p in circuit.passives])
    ends = nominal * (1 + spread * np.random.default_rng(6).choice([-1.0, 1.0], drawn.shape))
    assert_holds(found, circuit, np.vstack([drawn, ends]), wanted, frequency)


def test_without_work_the_bound_still_holds_and_is_wider():
    circuit = tow_thomas(figures(), damping=60e3)
    frequency = np.geomspace(2e3, 5e4, 41)
    target = compile_circuit(circuit).solve(frequency)
    quick = worst_case(circuit, target, frequency, work=0)
    slow = worst_case(circuit, target, frequency)
    assert quick.boxes == 0
    assert slow.boxes > 0
    assert quick.magnitude_db.bound is None or quick.magnitude_db.bound >= slow.magnitude_db.reached
    assert slow.phase_deg.bound <= quick.phase_deg.bound <= 180


def test_a_board_without_tolerances_is_its_own_worst_case():
    circuit = toleranced(rc())
    frequency = np.array([100.0, 1e3])
    found = worst_case(circuit, compile_circuit(circuit).solve(frequency) * 1.1, frequency)
    assert found.magnitude_db.reached == found.magnitude_db.bound
    assert found.magnitude_db.reached == pytest.approx(20 * np.log10(1.1), rel=1e-12)
    assert (found.magnitude_db.sign, found.magnitude_db.values) == (-1, {})


def test_a_response_that_all_but_vanishes_is_not_said_to_vanish():
    """A difference that balances on some board but for a turn of phase in the op-amp: H takes
    either sign, and there is no board without response."""
    op_amp = near_ideal()
    circuit = Circuit(
        passives=(
            part("R1", "in a_s", 10e3),
            part("R2", "a_s a", 10e3),
            part("R3", "a out_s", 10e3),
            part("R4", "in out_s", 10.1e3),
            part("R5", "out_s out", 10e3),
        ),
        amplifiers=(amplifier("U1", "0 a_s a", op_amp), amplifier("U2", "0 out_s out", op_amp)),
    )
    frequency = np.array([100.0, 200.0])
    target = compile_circuit(circuit).solve(frequency)
    found = worst_case(circuit, target, frequency, work=100_000)
    assert not found.magnitude_db.unlimited
    assert found.magnitude_db.reached > 40
    assert not found.magnitude_db.meets
    assert found.phase_deg.reached == pytest.approx(180, abs=1e-3)
    assert found.phase_deg.bound == pytest.approx(180, abs=1e-3)


def test_the_same_circuit_gives_the_same_worst_case():
    circuit = tow_thomas(figures(), damping=30e3)
    frequency = np.geomspace(2e3, 5e4, 21)
    target = compile_circuit(circuit).solve(frequency)
    assert worst_case(circuit, target, frequency) == worst_case(circuit, target, frequency)


def test_a_target_of_another_shape_is_refused():
    with pytest.raises(CircuitError, match="expected one value at each"):
        worst_case(rc(), [1.0, 1.0], [100.0])


def test_a_bound_below_what_is_reached_is_refused():
    common = {"unit": "dB", "sign": 1, "frequency_hz": 1.0, "values": {}}
    ends = {"low": (), "high": (), "between": ()}
    assert WorstError(reached=1.0, bound=1.05, **common, **ends).meets
    assert not WorstError(reached=1.0, bound=1.06, **common, **ends).meets
    assert not WorstError(reached=1.0, bound=None, **common, **ends).meets
    with pytest.raises(ValueError, match=r"expected 1\.0 or more"):
        WorstError(reached=1.0, bound=0.99, **common, **ends)
