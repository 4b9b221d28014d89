"""Circuits for the tests: classics with known answers, and random ones."""

from __future__ import annotations

import math
from collections import Counter

import numpy as np

from synth.circuit import Amplifier, Circuit, Passive
from synth.parts import OpAmp, PartRule

RESISTORS = PartRule(kind="resistor", series="E96", tolerance=0.01, smallest=1.0, largest=1e9)
CAPACITORS = PartRule(kind="capacitor", series="E12", tolerance=0.05, smallest=1e-13, largest=1.0)


def op_amp(gain_bandwidth=10e6, open_loop_gain=1e5, **figures):
    given = {
        "kind": "test",
        "gain_bandwidth": gain_bandwidth,
        "slew_rate": 1e7,
        "open_loop_gain": open_loop_gain,
        "offset": 1e-3,
        "bias_current": 1e-7,
        "voltage_noise": 8e-9,
        "current_noise": 0.5e-12,
        "swing_headroom": 1.5,
        "output_current": 0.02,
        "supply_current": 1e-3,
    }
    return OpAmp(**(given | figures))


IDEAL = op_amp(1e15, 1e12)
"""As good as ideal at audio frequencies."""


def resistor(ref, a, b, value, *, bought=True):
    rule = RESISTORS if bought else None
    return Passive(ref=ref, kind="resistor", nets=(a, b), value=value, ideal=value, rule=rule)


def capacitor(ref, a, b, value):
    return Passive(
        ref=ref, kind="capacitor", nets=(a, b), value=value, ideal=value, rule=CAPACITORS
    )


def amplifier(ref, plus, minus, output, figures=IDEAL):
    return Amplifier(ref=ref, plus=plus, minus=minus, output=output, figures=figures)


def integrator(figures, *, leak=None, resistance=10e3, capacitance=10e-9):
    """An inverting integrator, with a resistor across the capacitor when `leak` is given."""
    parts = [resistor("R1", "in", "s", resistance), capacitor("C1", "out", "s", capacitance)]
    if leak is not None:
        parts.append(resistor("R2", "out", "s", leak))
    return Circuit(passives=tuple(parts), amplifiers=(amplifier("U1", "0", "s", "out", figures),))


def tow_thomas(figures=IDEAL, *, r=10e3, c=1.59e-9, damping=10e3):
    """Two integrators and an inverter in a loop; the output is the low-pass."""
    return Circuit(
        passives=(
            resistor("R1", "in", "a_s", r),
            resistor("R2", "a", "a_s", damping),
            resistor("R3", "b_n", "a_s", r),
            capacitor("C1", "a", "a_s", c),
            resistor("R4", "a", "out_s", r),
            capacitor("C2", "out", "out_s", c),
            resistor("R5", "out", "n_s", r),
            resistor("R6", "b_n", "n_s", r),
        ),
        amplifiers=(
            amplifier("U1", "0", "a_s", "a", figures),
            amplifier("U2", "0", "out_s", "out", figures),
            amplifier("U3", "0", "n_s", "b_n", figures),
        ),
    )


def chain(order, figures, *, frequency_hz=1e3, load=None, source=None):
    """A controllable-canonical loop of `order` integrators with Butterworth coefficients, its
    adder and inverters: about order + 3 op-amps."""
    w0, r, c = 2 * math.pi * frequency_hz, 10e3, 10e-9
    angles = math.pi * (2 * np.arange(order) + order + 1) / (2 * order)
    a = np.poly(np.exp(1j * angles)).real  # descending, monic
    x, parts, amps = "in", [], []
    if source is not None:
        parts.append(resistor("RS", "in", "src", source, bought=False))
        x = "src"
    names = ["out" if k == 0 else f"x{k}" for k in range(order)]  # x_k = s^k y, up to sign
    scale = 1 / (w0 * r * c)
    for k in range(order - 1):
        parts.append(resistor(f"R{k}", names[k + 1], f"{names[k]}_s", r * scale))
        parts.append(capacitor(f"C{k}", names[k], f"{names[k]}_s", c))
        amps.append(amplifier(f"U{k}", "0", f"{names[k]}_s", names[k], figures))
    top = order - 1
    parts.append(capacitor(f"C{top}", names[top], f"{names[top]}_s", c))
    amps.append(amplifier(f"U{top}", "0", f"{names[top]}_s", names[top], figures))
    parts.append(resistor("RIN", x, f"{names[top]}_s", r * scale))
    # Signal s^k y carries (-1)^k; the row of the top integrator needs sign (-1)^top.
    for k in range(order):
        node = names[k]
        if (top - k) % 2:
            node = f"{names[k]}_n"
            parts.append(resistor(f"RA{k}", names[k], f"{names[k]}_ns", r))
            parts.append(resistor(f"RB{k}", node, f"{names[k]}_ns", r))
            amps.append(amplifier(f"V{k}", "0", f"{names[k]}_ns", node, figures))
        parts.append(resistor(f"RF{k}", node, f"{names[top]}_s", r * scale / a[order - k]))
    if load is not None:
        parts.append(resistor("RL", "out", "0", load, bought=False))
    return Circuit(passives=tuple(parts), amplifiers=tuple(amps))


def random_circuit(rng, *, most_amplifiers=9):
    """A random RC network around op-amps: any topology the engine must take.

    Every op-amp has a feedback part and an input part at -; its + is at ground, the input, a
    divider, another output or a passive net.  Values roam over several decades.
    """
    count = int(rng.integers(1, most_amplifiers + 1))
    outputs = [f"y{k}" for k in range(count - 1)] + ["out"]
    inner = [f"p{k}" for k in range(int(rng.integers(0, 4)))]
    sources = ["in", *outputs, *inner]
    parts, amps = [], []

    def add(a, b, kind=None):
        kind = kind or ("resistor" if rng.random() < 0.65 else "capacitor")
        if kind == "resistor":
            parts.append(resistor(f"R{len(parts)}", a, b, float(10 ** rng.uniform(2.5, 6.5))))
        else:
            parts.append(capacitor(f"C{len(parts)}", a, b, float(10 ** rng.uniform(-11, -6))))

    for k, out in enumerate(outputs):
        figures = op_amp(float(10 ** rng.uniform(5, 8)), float(10 ** rng.uniform(3.5, 6.5)))
        minus, choice = f"m{k}", rng.random()
        if choice < 0.1:
            minus = out  # a follower
        else:
            add(out, minus)
            add("in" if k == 0 else str(rng.choice(sources)), minus)
            for _ in range(int(rng.integers(0, 3))):
                add(str(rng.choice(sources)), minus)
        if minus != out and choice < 0.6:
            plus = "0"
        elif choice < 0.75:
            plus = str(rng.choice([s for s in sources if s != out]))
        else:
            plus = f"q{k}"
            add(str(rng.choice(sources)), plus)
            add(str(rng.choice(["0", *sources])), plus)
        amps.append(amplifier(f"U{k}", plus, minus, out, figures))
    for net in inner:
        add("in", net)
        add(str(rng.choice([*outputs, "0", *(i for i in inner if i != net)])), net)
    for _ in range(int(rng.integers(0, 3))):
        a, b = rng.choice([*sources, *(f"m{k}" for k in range(count))], size=2, replace=False)
        add(str(a), str(b))
    used = {n for p in parts for n in p.nets} | {n for a in amps for n in (a.plus, a.minus)}
    for net in ({"in"} | {f"y{k}" for k in range(count - 1)}) - used:
        add(net, "0")
    parts.append(resistor("RLOAD", "out", "0", 10e3, bought=False))
    pins = [n for a in amps for n in (a.plus, a.minus, a.output)]
    count_of = Counter([*pins, *(n for p in parts for n in p.nets)])
    for net in sorted(n for n, number in count_of.items() if number == 1 and n not in ("0", "in")):
        add(net, "0", "resistor")
    for net in _without_dc_path(parts, outputs):
        add(net, "0", "resistor")
    return Circuit(passives=tuple(parts), amplifiers=tuple(amps))


def _without_dc_path(parts, outputs):
    """One net of every group that no resistor ties to a driven net: SPICE wants a DC level."""
    groups = {}
    for net in ["0", "in", *outputs, *(n for p in parts for n in p.nets)]:
        groups.setdefault(net, {net})
    for part in parts:
        if part.kind == "resistor":
            a, b = (groups[n] for n in part.nets)
            if a is not b:
                a |= b
                groups.update(dict.fromkeys(b, a))
    driven = {"0", "in", *outputs}
    return sorted({min(g) for g in groups.values() if not g & driven})
