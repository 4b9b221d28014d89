"""Circuit -> SPICE text.  Pure and deterministic: the same circuit gives the same bytes.

Nets keep their names, ground is ``0``; every component is one top-level line such as
``R1 in x1_s 10200.0``, numbers plain, without suffixes.  Op-amp ``U1`` is the subcircuit call
``XU1 plus minus out``, one subcircuit per distinct set of figures.  The only text from a user
is in comments, filtered to printable ASCII without backslashes, so it can neither end a line
nor join two.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence

from netlist.opamp_models import linear_model, number, saturating_model
from synth.circuit import Circuit, Passive
from synth.errors import CircuitError
from synth.grid import Sweep
from synth.parts import OpAmp, VendorModel

__all__ = ["board_deck", "filtered", "follower_deck", "sine_deck", "step_deck", "vendor_deck"]

LONGEST_TEXT = 120
SOURCE = "Vin"
_LETTER = {"resistor": "R", "capacitor": "C"}
# Nets of the rails; no net of a circuit starts with an underscore.
_RAILS = {"vcc": "_rail_high", "vee": "_rail_low"}
# On an output that is driven alone [ohm]: little, but never nothing (common practice).
_LIGHT_LOAD = 100e3
# Names that a SPICE program gives another meaning.
_RESERVED_NETS = frozenset({"frequency", "gnd", "null", "time"})

Model = Callable[[str, OpAmp], tuple[str, ...]]


def board_deck(
    circuit: Circuit,
    *,
    title: str,
    start_hz: float,
    stop_hz: float,
    points_per_decade: int,
    further: Sequence[Sweep] = (),
) -> str:
    """The linear deck: AC response at the output, operating point, noise sources in place.

    ``ngspice -b`` runs it as it is; see `synth.grid.band_grid` for its frequencies.  Of `further`
    sweeps each is another table.

    Raises
    ------
    CircuitError
        A name that SPICE cannot take, or a sweep less than one step wide.
    """
    if not (0 < start_hz < stop_hz < math.inf):
        raise CircuitError(
            f"got a sweep from {start_hz} Hz to {stop_hz} Hz, expected 0 < from < to"
        )
    if math.log10(stop_hz / start_hz) * points_per_decade < 1.000001:
        # ngspice 39 never ends on such a sweep.
        raise CircuitError(
            f"got {points_per_decade} points per decade from {start_hz} Hz to {stop_hz} Hz, "
            "expected at least one step"
        )
    out = circuit.output_net
    return _text(
        [
            f"* {filtered(title)}",
            "* The board as it is verified: linear op-amps with one pole and their noise.",
            f"{SOURCE} {circuit.input_net} 0 DC 0 AC 1",
            *_components(circuit, linear_model),
            "* Response at the output: magnitude in dB, phase in radians.",
            *_sweep_lines(Sweep(start_hz, stop_hz, points_per_decade), further),
            f".print ac vdb({out}) vp({out})",
            ".op",
        ]
    )


def step_deck(
    circuit: Circuit,
    *,
    title: str,
    supply: tuple[float, float],
    step_volts: float,
    stop_s: float,
    delay_s: float | None = None,
    edge_s: float | None = None,
    largest_step_s: float | None = None,
) -> str:
    """The transient deck: a voltage step into op-amps that saturate and slew.

    Parameters
    ----------
    supply
        Negative and positive rail [V].
    step_volts
        Height of the step, from 0 V.
    stop_s
        End of the run [s].
    delay_s, edge_s
        Start and length of the edge [s]; by default 1/50 and 1/10,000 of the run.
    largest_step_s
        Upper bound of the time step [s]; by default 1/1,000 of the run.

    Raises
    ------
    CircuitError
        A name that SPICE cannot take, or times that are not in order.
    """
    delay = stop_s / 50 if delay_s is None else delay_s
    edge = stop_s / 10_000 if edge_s is None else edge_s
    largest = stop_s / 1000 if largest_step_s is None else largest_step_s
    times = (delay, edge, largest, stop_s)
    if not (all(0 < t < math.inf for t in times) and delay + edge < stop_s and largest <= stop_s):
        raise CircuitError(
            f"got a step after {delay} s, an edge of {edge} s, time steps up to {largest} s and an "
            f"end at {stop_s} s, expected positive times in order"
        )
    if not math.isfinite(step_volts):
        raise CircuitError(f"got a step of {step_volts} V, expected a finite voltage")

    high = number(step_volts)
    source = (
        f"{SOURCE} {circuit.input_net} 0 PWL(0.0 0.0 {number(delay)} 0.0 "
        f"{number(delay + edge)} {high} {number(stop_s)} {high})"
    )
    return _transient_deck(
        circuit,
        f"* {filtered(title)}",
        "* The step response: op-amps that saturate at the rails and slew, no noise.",
        source,
        supply=supply,
        times=(largest, stop_s, 0.0, largest),
    )


def sine_deck(
    circuit: Circuit,
    *,
    title: str,
    supply: tuple[float, float],
    peak_volts: float,
    frequency_hz: float,
    rise_s: float,
    stop_s: float,
    kept_s: float,
    largest_step_s: float,
) -> str:
    """A sine into op-amps that saturate and slew, its size rising smoothly over `rise_s`.

    The smooth rise hardly stirs what is slower than the sine itself, integrators included.

    Parameters
    ----------
    supply
        Negative and positive rail [V].
    peak_volts, frequency_hz
        Of the sine at the input [V], [Hz].
    rise_s, stop_s, kept_s
        Length of the rise, end of the run, and how much before the end is reported [s].
    largest_step_s
        Upper bound of the time step [s].

    Raises
    ------
    CircuitError
        A name that SPICE cannot take, or figures that are not positive or not in order.
    """
    figures = (peak_volts, frequency_hz, rise_s, stop_s, kept_s, largest_step_s)
    if not (all(0 < x < math.inf for x in figures) and rise_s + kept_s <= stop_s):
        raise CircuitError(f"got {figures} for a sine, expected positive figures in order")
    rise = f"sin(0.5*pi*min(1.0,time/{number(rise_s)}))"
    turn = f"sin({number(2 * math.pi * frequency_hz)}*time)"
    return _transient_deck(
        circuit,
        f"* {filtered(title)}",
        "* A sine of the largest input: op-amps that saturate at the rails and slew, no noise.",
        f"Bsine {circuit.input_net} 0 v={number(peak_volts)}*{turn}*{rise}*{rise}",
        supply=supply,
        times=(largest_step_s, stop_s, stop_s - kept_s, largest_step_s),
    )


def _transient_deck(
    circuit: Circuit,
    title: str,
    told: str,
    source: str,
    *,
    supply: tuple[float, float],
    times: tuple[float, float, float, float],
) -> str:
    def model(name: str, figures: OpAmp) -> tuple[str, ...]:
        return saturating_model(name, figures, supply=supply)

    return _text(
        [
            title,
            told,
            source,
            *_components(circuit, model),
            "* Trapezoidal rule: Gear's method would damp resonances of its own accord.",
            ".options method=trap reltol=1e-05",
            f".tran {' '.join(number(t) for t in times)}",
            f".print tran v({circuit.input_net}) v({circuit.output_net})",
        ]
    )


def vendor_deck(
    circuit: Circuit,
    model: VendorModel,
    *,
    title: str,
    supply: tuple[float, float],
    start_hz: float,
    stop_hz: float,
    points_per_decade: int,
    further: Sequence[Sweep] = (),
) -> str:
    """The AC deck with a vendor's model for every op-amp, between rails.

    Its statements are those `netlist.vendormodel` let pass.

    Raises
    ------
    CircuitError
        A name that SPICE cannot take.
    """
    _check_nets(circuit)
    lines = [line for part in circuit.passives for line in _passive(part)]
    lines += [
        f"X{amp.ref} {_called(model, amp.plus, amp.minus, amp.output)}"
        for amp in circuit.amplifiers
    ]
    return _text(
        [
            f"* {filtered(title)}",
            "* The response with a vendor's model of the op-amp.",
            f"{SOURCE} {circuit.input_net} 0 DC 0 AC 1",
            *_rails(supply),
            *lines,
            *model.cards,
            *_sweep_lines(Sweep(start_hz, stop_hz, points_per_decade), further),
        ]
    )


def follower_deck(model: VendorModel, *, supply: tuple[float, float], drive: float) -> str:
    """A vendor's model twice, without feedback: the + input at `drive` [V] in the one, whose
    output is net ``out_up``, at the opposite in the other, ``out_down``; the - inputs at ground.
    """
    lines = []
    for name, volts in (("up", drive), ("down", -drive)):
        lines += [
            f"Vdrive_{name} plus_{name} 0 DC {number(volts)}",
            f"Xmodel_{name} {_called(model, f'plus_{name}', '0', f'out_{name}')}",
            f"Rload_{name} out_{name} 0 {number(_LIGHT_LOAD)}",
        ]
    told = "* A vendor's model of the op-amp on its own."
    return _text([told, *_rails(supply), *lines, *model.cards, ".op"])


def _called(model: VendorModel, plus: str, minus: str, out: str) -> str:
    """The nets in the order of the model's pins, and its name."""
    pins = {"plus": plus, "minus": minus, "out": out, **_RAILS}
    return " ".join([*(pins[pin] for pin in model.pins), model.subcircuit])


def _rails(supply: tuple[float, float]) -> list[str]:
    """The sources of the supply [V]."""
    return [
        f"Vrail_low {_RAILS['vee']} 0 DC {number(supply[0])}",
        f"Vrail_high {_RAILS['vcc']} 0 DC {number(supply[1])}",
    ]


def _sweep_lines(whole: Sweep, further: Sequence[Sweep]) -> list[str]:
    return [
        f".ac dec {s.points_per_decade:d} {number(s.start_hz)} {number(s.stop_hz)}"
        for s in (whole, *further)
    ]


def filtered(text: str) -> str:
    """Text that is safe in a comment: printable ASCII on one line, no backslash, not too long."""
    kept = "".join(c for c in text if " " <= c <= "~" and c != "\\")
    return " ".join(kept.split())[:LONGEST_TEXT].rstrip()


def _components(circuit: Circuit, model: Model) -> list[str]:
    """Lines of all parts, then the subcircuits they call."""
    _check_nets(circuit)
    lines = [line for part in circuit.passives for line in _passive(part)]
    names: dict[OpAmp, str] = {}
    for amp in circuit.amplifiers:
        name = names.setdefault(amp.figures, f"opamp_{len(names) + 1}")
        lines += _comment(amp.ref, amp.sets)
        lines.append(f"X{amp.ref} {amp.plus} {amp.minus} {amp.output} {name}")
    for figures, name in names.items():
        lines += model(name, figures)
    return lines


def _passive(part: Passive) -> tuple[str, ...]:
    letter = _LETTER[part.kind]
    if not part.ref.startswith(letter):
        raise CircuitError(
            f"got the reference {part.ref!r} for a {part.kind}, expected one that starts with "
            f"{letter}"
        )
    return (
        *_comment(part.ref, part.sets),
        f"{part.ref} {' '.join(part.nets)} {number(part.value)}",
    )


def _comment(ref: str, sets: str) -> tuple[str, ...]:
    told = filtered(sets)
    return (f"* {ref}: {told}",) if told else ()


def _check_nets(circuit: Circuit) -> None:
    for net in circuit.connections:
        if net in _RESERVED_NETS:
            raise CircuitError(f"got the net name {net!r}, which SPICE gives another meaning")


def _text(lines: list[str]) -> str:
    return "\n".join([*lines, ".end", ""])
