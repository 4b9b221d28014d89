"""Which limit fails first, and the parts that drive it, against a plain loop and against the
first-order shares of the sensitivities."""

from dataclasses import replace

import numpy as np
import pytest

from synth.evidence import response_error
from synth.job import Accept
from synth.nodal import compile_circuit
from synth.population import Network, PartSpread, Population
from synth.tolerance import boards as boards_module
from synth.tolerance import drawn_values, run_boards, tolerances_of
from synth.tolerance.failures import FailureTally, Place
from tests.synth.nodal.boards import IDEAL, chain, op_amp, tow_thomas

BAND = np.geomspace(1e3, 30e3, 41)
TIGHT = Accept(magnitude_db=0.5, phase_deg=3.0)


def run(circuit, *, boards=3000, accept=TIGHT, band=BAND, **options):
    program = compile_circuit(circuit)
    return run_boards(
        program, circuit, program.solve(band), band, accept=accept, boards=boards, seed=3, **options
    )


def shares(result):
    return {d.refs[0]: d.share for d in result.drivers}


def test_counts_equal_those_of_a_plain_loop_over_boards():
    circuit = tow_thomas()
    result = run(circuit, boards=200)
    program = compile_circuit(circuit)
    target = program.solve(BAND)
    first = {"magnitude": [], "phase": []}
    both = 0
    for values in drawn_values(circuit, 200, 3):
        error = response_error(program.solve(BAND, values=values), target)
        db, deg = np.abs(error.magnitude_db) / 0.5, np.abs(error.phase_deg) / 3.0
        if max(db.max(), deg.max()) > 1:
            name, share = ("magnitude", db) if db.max() >= deg.max() else ("phase", deg)
            first[name].append(BAND[share.argmax()])
            both += bool(db.max() > 1 and deg.max() > 1)
    found = result.failures
    assert found.boards == 200 - result.passed == sum(map(len, first.values()))
    assert found.both == both
    assert 0 < both < found.boards < 200
    assert [f.boards for f in found.first] == sorted((f.boards for f in found.first), reverse=True)
    for limit in found.first:
        assert limit.boards == len(first[limit.quantity]) > 0
        for got, share in ((limit.low_hz, 5), (limit.frequency_hz, 50), (limit.high_hz, 95)):
            expected = np.percentile(first[limit.quantity], share, method="inverted_cdf")
            assert got == pytest.approx(expected, rel=1e-9)


def test_shares_of_independent_parts_are_those_of_first_order():
    """A second method: sensitivity squared times the variance of the part, at the frequency where
    every board comes closest to its limit."""
    circuit = tow_thomas(IDEAL)
    place = np.array([8e3])
    result = run(circuit, boards=20_000, accept=Accept(magnitude_db=0.5, phase_deg=90), band=place)
    assert result.failures.first[0].quantity == "magnitude"
    slopes = compile_circuit(circuit).sensitivities(place).passives[0].real
    variance = (slopes * tolerances_of(circuit)) ** 2
    expected = dict(zip([p.ref for p in circuit.passives], variance / variance.sum(), strict=True))
    found = shares(result)
    for ref, share in expected.items():
        assert found.get(ref, 0.0) == pytest.approx(share, abs=0.02)
    assert sum(found.values()) == pytest.approx(1.0, abs=0.03)
    assert list(found.values()) == sorted(found.values(), reverse=True)


def test_a_part_without_tolerance_drives_nothing():
    circuit = tow_thomas()
    exact = tuple(replace(p, grade=0.0) if p.ref == "C1" else p for p in circuit.passives)
    found = shares(run(replace(circuit, passives=exact)))
    assert "C1" not in found
    assert max(found, key=found.get) == "C2"


def test_op_amps_drive_the_error_where_their_spread_is_what_there_is():
    circuit = tow_thomas(op_amp(gain_bandwidth=1e6))
    exact = tuple(replace(p, grade=0.0) for p in circuit.passives)
    result = run(
        replace(circuit, passives=exact),
        population=Population(gain_bandwidth_spread=0.4),
        accept=Accept(magnitude_db=0.05, phase_deg=0.5),
    )
    (driver,) = result.drivers
    assert (driver.refs, driver.kind) == (("U1", "U2", "U3"), "op_amp")
    assert driver.share > 0.9
    assert result.failures.boards > 0


def test_matching_the_resistors_of_the_inverter_takes_their_share_away():
    """The gain of the inverter is R6/R5: matched, both move it no more."""
    circuit = tow_thomas()
    place = np.array([8e3])
    loose = shares(run(circuit, boards=10_000, band=place))
    network = Network(refs=("R5", "R6"), tolerance=0.0)
    population = Population(networks=(network,))
    matched = shares(run(circuit, boards=10_000, band=place, population=population))
    assert loose["R5"] > 0.01
    assert matched.get("R5", 0.0) < 0.002


def test_lots_share_what_they_drive():
    """Two capacitors of one reel, nothing else: each explains what the other does."""
    circuit = tow_thomas()
    exact = tuple(p if p.kind == "capacitor" else replace(p, grade=0.0) for p in circuit.passives)
    population = Population(capacitors=PartSpread(lot=1.0))
    found = shares(run(replace(circuit, passives=exact), population=population))
    assert found["C1"] == pytest.approx(found["C2"])
    assert found["C1"] > 0.9


def test_without_failures_the_places_that_come_closest_count():
    result = run(tow_thomas(), accept=Accept(magnitude_db=30, phase_deg=179))
    assert result.failures.boards == result.failures.both == 0
    assert all(f.frequency_hz is None for f in result.failures.first)
    assert result.drivers


def test_too_few_boards_tell_no_drivers():
    assert run(tow_thomas(), boards=20).drivers == ()


def test_blocks_do_not_matter(monkeypatch):
    population = Population(
        resistors=PartSpread(distribution="normal", lot=0.5, temperature_coefficient=5e-5),
        temperature=(0, 60),
        gain_bandwidth_spread=0.4,
    )
    whole = run(chain(2, op_amp()), boards=700, population=population)
    monkeypatch.setattr(boards_module, "BLOCK", 37)
    parts = run(chain(2, op_amp()), boards=700, population=population)
    assert parts.failures == whole.failures
    assert parts.error_95_db == pytest.approx(whole.error_95_db, rel=1e-12)
    for a, b in zip(parts.drivers, whole.drivers, strict=True):
        assert a.refs == b.refs
        assert a.share == pytest.approx(b.share, rel=1e-9)


def test_a_board_whose_error_is_no_number_fails():
    tally = FailureTally(np.array([1.0, 2.0]), TIGHT)
    tally.add(np.array([[0.1, np.nan], [0.1, 0.2]]), np.zeros((2, 2)))
    assert tally.failed == 1


def test_places_stand_for_all_boards_that_fail():
    tally = FailureTally(np.arange(1.0, 101.0), TIGHT)
    db, deg = np.zeros((50, 100)), np.zeros((50, 100))
    db[np.arange(30), np.arange(30)] = 1.0
    deg[np.arange(30, 40), 77] = 4.0
    tally.add(db, deg)
    places = tally.places()
    assert sum(p.boards for p in places) == 40
    assert Place(1, 77, 10.0) in places
    assert [p.index for p in places if p.quantity == 0] == [2, 8, 14, 20, 26]
