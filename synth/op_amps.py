"""Generic classes of op-amps.

Every figure is invented but typical of its class (common practice): none is a guarantee, and
none belongs to a part one can buy.  A design review replaces them with the data sheet's.
"""

from __future__ import annotations

import difflib
from collections.abc import Mapping
from types import MappingProxyType

from synth.errors import JobError
from synth.parts import OpAmp
from synth.quantities import what_came

__all__ = ["DEFAULT_CLASS", "OP_AMP_CLASSES", "op_amp_class"]

DEFAULT_CLASS = "general purpose"

_GENERAL_PURPOSE = OpAmp(
    kind="general purpose",
    gain_bandwidth=10e6,
    slew_rate=10e6,
    open_loop_gain=1e5,
    offset=1e-3,
    bias_current=100e-9,
    voltage_noise=8e-9,
    current_noise=0.5e-12,
    swing_headroom=1.5,
    output_current=20e-3,
    supply_current=2.5e-3,
)

# Laser-trimmed bipolar input: little offset and drift, slow.
_PRECISION = OpAmp(
    kind="precision",
    gain_bandwidth=8e6,
    slew_rate=2.5e6,
    open_loop_gain=2e6,
    offset=25e-6,
    bias_current=1e-9,
    voltage_noise=4e-9,
    current_noise=0.4e-12,
    swing_headroom=1.5,
    output_current=20e-3,
    supply_current=2e-3,
)

# Hardly any bias current, for high resistances; more voltage noise.
_JFET_INPUT = OpAmp(
    kind="JFET input",
    gain_bandwidth=5e6,
    slew_rate=15e6,
    open_loop_gain=2e5,
    offset=1.5e-3,
    bias_current=30e-12,
    voltage_noise=15e-9,
    current_noise=0.01e-12,
    swing_headroom=2.0,
    output_current=20e-3,
    supply_current=2e-3,
)

# For fast loops and high Q; draws current at its inputs and its supply pins.
_WIDEBAND = OpAmp(
    kind="wideband",
    gain_bandwidth=80e6,
    slew_rate=100e6,
    open_loop_gain=5e4,
    offset=1e-3,
    bias_current=1e-6,
    voltage_noise=5e-9,
    current_noise=1.5e-12,
    swing_headroom=1.8,
    output_current=40e-3,
    supply_current=7e-3,
)

OP_AMP_CLASSES: Mapping[str, OpAmp] = MappingProxyType(
    {a.kind: a for a in (_GENERAL_PURPOSE, _PRECISION, _JFET_INPUT, _WIDEBAND)}
)
"""The classes by name; the first is the default."""


def op_amp_class(name: str, *, key: str = "") -> OpAmp:
    """The figures of a class.

    Raises
    ------
    JobError
        An unknown name; the message lists those there are.
    """
    if name in OP_AMP_CLASSES:
        return OP_AMP_CLASSES[name]
    by_lower = {k.lower(): k for k in OP_AMP_CLASSES}
    plain = name.lower().replace("-", " ").replace("_", " ")
    near = difflib.get_close_matches(plain, by_lower, n=1)
    hint = f"; did you mean {by_lower[near[0]]!r}?" if near else ""
    raise JobError(
        f"got the class {what_came(name)}, expected one of {', '.join(OP_AMP_CLASSES)}{hint}",
        key=key,
    )
