"""A population refuses what cannot be, with the key of the job that says so."""

import pytest

from synth.errors import JobError
from synth.population import Network, PartSpread, Population

PAIR = Network(refs=("R1", "R2"), tolerance=0.001)


def test_the_default_is_plain_and_anything_stated_is_not():
    assert Population().is_plain
    assert not Population(resistors=PartSpread(distribution="normal")).is_plain
    assert not Population(networks=(PAIR,)).is_plain
    assert not Population(gain_bandwidth_spread=0.1).is_plain


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: PartSpread(distribution="gauss"), "distribution: got 'gauss', expected 'uniform'"),
        (lambda: PartSpread(lot=1.2), "lot: got 120 %, expected a share from 0 to 100 %"),
        (
            lambda: PartSpread(temperature_coefficient=0.01),
            "temperature_coefficient: got 10000 ppm/K, expected 0 to 2000 ppm/K",
        ),
        (lambda: Network(refs=("R1",), tolerance=0.001), "refs: got R1, expected two or more"),
        (lambda: Network(refs=(), tolerance=0.001), "refs: got no part, expected two or more"),
        (lambda: Network(refs=("R1", "R1"), tolerance=0.001), "refs: got R1 twice"),
        (lambda: Network(refs=("R1", "U1"), tolerance=0.001), "refs: got the reference 'U1'"),
        (lambda: Network(refs=("R1", "C1"), tolerance=0.001), "expected all resistors or all"),
        (lambda: Network(refs=("R1", "R2"), tolerance=1.0), "tolerance: got 100 %, expected 0 to"),
        (
            lambda: Population(networks=(PAIR, Network(refs=("R3", "R2"), tolerance=0.001))),
            r"board.networks\[2\].refs: got R2, which is in network 1 too",
        ),
        (
            lambda: Population(gain_bandwidth_spread=1.0),
            "board.op_amp.gain_bandwidth_spread: got 100 %",
        ),
        (
            lambda: Population(temperature=(0.0, 60.0)),
            "board.temperature: got temperatures without",
        ),
        (
            lambda: Population(capacitors=PartSpread(temperature_coefficient=3e-5)),
            "board.capacitors.temperature_coefficient: got a temperature coefficient without",
        ),
        (
            lambda: Population(networks=(Network(refs=("R1", "R2"), tolerance=0, tracking=5e-6),)),
            r"board.networks\[1\].tracking: got a temperature coefficient without",
        ),
        (
            lambda: Population(
                temperature=(60.0, 0.0), resistors=PartSpread(temperature_coefficient=5e-5)
            ),
            "board.temperature: got 60 to 0 degC, expected -100 degC <= lowest < highest",
        ),
    ],
)
def test_nonsense_is_refused_in_one_line(make, message):
    with pytest.raises(JobError, match=message) as caught:
        make()
    assert "\n" not in str(caught.value)
