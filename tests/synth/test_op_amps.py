"""Classes of op-amps: the default is the documented one, and the classes differ as they should."""

from __future__ import annotations

import dataclasses
import re

import pytest

from synth.errors import JobError
from synth.op_amps import DEFAULT_CLASS, OP_AMP_CLASSES, op_amp_class


def test_the_default_class_has_the_documented_figures():
    figures = dataclasses.asdict(op_amp_class(DEFAULT_CLASS))
    assert figures == {
        "kind": "general purpose",
        "gain_bandwidth": 10e6,
        "slew_rate": 10e6,
        "open_loop_gain": 1e5,
        "offset": 1e-3,
        "bias_current": 100e-9,
        "voltage_noise": 8e-9,
        "current_noise": 0.5e-12,
        "swing_headroom": 1.5,
        "output_current": 20e-3,
        "supply_current": 2.5e-3,
    }


def test_each_class_is_known_by_the_name_it_carries():
    assert list(OP_AMP_CLASSES) == ["general purpose", "precision", "JFET input", "wideband"]
    assert all(name == figures.kind for name, figures in OP_AMP_CLASSES.items())


def test_each_class_is_best_at_what_it_is_for():
    """Common practice."""
    classes = OP_AMP_CLASSES.values()
    assert min(classes, key=lambda a: a.offset).kind == "precision"
    assert max(classes, key=lambda a: a.open_loop_gain).kind == "precision"
    assert min(classes, key=lambda a: a.bias_current).kind == "JFET input"
    assert min(classes, key=lambda a: a.current_noise).kind == "JFET input"
    assert max(classes, key=lambda a: a.gain_bandwidth).kind == "wideband"
    assert max(classes, key=lambda a: a.slew_rate).kind == "wideband"


def test_the_classes_cannot_be_changed():
    with pytest.raises(TypeError, match="does not support item assignment"):
        OP_AMP_CLASSES["precision"] = OP_AMP_CLASSES["wideband"]


@pytest.mark.parametrize(
    ("name", "shown", "hint"),
    [
        ("general-purpose", "'general-purpose'", "; did you mean 'general purpose'?"),
        ("jfet_input", "'jfet_input'", "; did you mean 'JFET input'?"),
        ("Precison", "'Precison'", "; did you mean 'precision'?"),
        ("x", "'x'", ""),
        ("y" * 500, f"'{'y' * 57}...'", ""),
    ],
)
def test_an_unknown_class_is_refused_with_those_there_are(name, shown, hint):
    message = (
        f"board.op_amp.kind: got the class {shown}, expected one of general purpose, precision, "
        f"JFET input, wideband{hint}"
    )
    with pytest.raises(JobError, match=f"^{re.escape(message)}$"):
        op_amp_class(name, key="board.op_amp.kind")
