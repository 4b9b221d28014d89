"""Op-amp models as SPICE subcircuits with the pins ``plus minus out``.

Both models have the one-pole gain A(s) = A0 / (1 + s A0 / (2 pi GBW)), draw no input current
and drive their output from an ideal source.  A transconductance g works into a resistance and
a capacitance at the inner net ``pole``: A0 = g R, 2 pi GBW = g / C.

Every element inside has a name longer than any reference of a circuit (16 characters), so no
name of a board is used again.  Temperatures are ngspice's default, 27 degrees Celsius.
"""

from __future__ import annotations

import math

from synth.constants import BOLTZMANN, TEMPERATURE
from synth.parts import OpAmp

__all__ = ["linear_model", "number", "saturating_model"]

TRANSCONDUCTANCE = 1e-3
"""Of the gain stage [S]; any value gives the same gain."""

NOISE_RESISTANCE = 1000.0
"""Of the resistors whose thermal noise is scaled to that of the inputs [ohm]."""

CLAMP_WIDTH = 0.01
"""Range of the output voltage over which the rail takes over [V]."""


def number(value: float) -> str:
    """A number as SPICE reads it: plain decimals, no suffix."""
    return repr(float(value))


def linear_model(name: str, figures: OpAmp) -> tuple[str, ...]:
    """Lines of a linear op-amp with its input noise and nothing else.

    `voltage_noise` acts at the + input; `current_noise` flows at each input, uncorrelated.
    The resistor of the pole is noiseless.
    """
    g = TRANSCONDUCTANCE
    lines = [
        *_header(name, figures),
        f"Gopamp_gain_stage 0 pole plus minus {number(g)}",
        *_pole(figures),
    ]
    thermal = math.sqrt(4 * BOLTZMANN * TEMPERATURE * NOISE_RESISTANCE)
    sources = (
        ("voltage_noise", figures.voltage_noise * g, "0 pole"),
        ("plus_current_noise", figures.current_noise, "0 plus"),
        ("minus_current_noise", figures.current_noise, "0 minus"),
    )
    for what, size, across in sources:
        if size > 0:
            lines += [
                f"Ropamp_{what} {what} 0 {number(NOISE_RESISTANCE)}",
                f"Gopamp_{what} {across} {what} 0 {number(size / thermal)}",
            ]
    return (*lines, f".ends {name}")


def saturating_model(name: str, figures: OpAmp, *, supply: tuple[float, float]) -> tuple[str, ...]:
    """Lines of an op-amp that slews and saturates, without noise.

    The current into the pole is I tanh(g v / I), I = C times the slew rate: one-pole for small
    differences v, never faster than the slew rate.  From `CLAMP_WIDTH` before the rail less the
    headroom on, a current that grows with the square of the excess opposes it; it equals I at
    the limit itself, so the inner net never runs beyond and recovers at once.
    """
    low = supply[0] + figures.swing_headroom + CLAMP_WIDTH
    high = supply[1] - figures.swing_headroom - CLAMP_WIDTH
    largest = figures.slew_rate * _capacitance(figures)
    stiffness = largest / CLAMP_WIDTH**2
    over, under = f"uramp(v(pole)-({number(high)}))", f"uramp(({number(low)})-v(pole))"
    steepness = TRANSCONDUCTANCE / largest
    return (
        *_header(name, figures),
        f"* slews at {number(figures.slew_rate)} V/s, saturates at "
        f"{number(supply[0] + figures.swing_headroom)} V and "
        f"{number(supply[1] - figures.swing_headroom)} V",
        f"Bopamp_input_stage 0 pole i={number(largest)}"
        f"*tanh({number(steepness)}*(v(plus)-v(minus)))",
        f"Bopamp_upper_clamp pole 0 i={number(stiffness)}*{over}*{over}",
        f"Bopamp_lower_clamp 0 pole i={number(stiffness)}*{under}*{under}",
        *_pole(figures),
        f".ends {name}",
    )


def _header(name: str, figures: OpAmp) -> tuple[str, ...]:
    return (
        f".subckt {name} plus minus out",
        f"* open-loop gain {number(figures.open_loop_gain)}, "
        f"gain-bandwidth {number(figures.gain_bandwidth)} Hz",
    )


def _capacitance(figures: OpAmp) -> float:
    return TRANSCONDUCTANCE / (2 * math.pi * figures.gain_bandwidth)


def _pole(figures: OpAmp) -> tuple[str, ...]:
    resistance = figures.open_loop_gain / TRANSCONDUCTANCE
    return (
        f"Ropamp_pole_resistance pole 0 {number(resistance)} noisy=0",
        f"Copamp_pole_capacitance pole 0 {number(_capacitance(figures))}",
        "Eopamp_output_stage out 0 pole 0 1.0",
    )
