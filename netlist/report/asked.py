"""What was asked, ready for the page: H(s) as polynomials and as roots, the band, the limits,
the parts that may be used."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from fractions import Fraction

from netlist.report.boards import population_rows
from netlist.report.wording import decibel, number, quantity, scientific, spelled, stated
from synth.job import Job
from synth.parts import OpAmp, PartRule
from synth.transfer import Factor, TransferFunction

__all__ = ["gain_lines", "polynomial", "requirements", "roots"]

Row = tuple[str, str]


def polynomial(coefficients: Sequence[Fraction]) -> list[dict[str, object]]:
    """Terms of a polynomial in s, descending powers, those that are zero left out.

    Each term has `sign` ("" for a leading plus), `mantissa` ("" for a factor 1 that need not
    be written), `exponent` of ten (0: none) and `power` of s.
    """
    terms: list[dict[str, object]] = []
    degree = len(coefficients) - 1
    for k, coefficient in enumerate(coefficients):
        if not coefficient:
            continue
        power = degree - k
        mantissa, exponent = scientific(abs(float(coefficient)))
        if coefficient in (1, -1) and power:
            mantissa = ""
        sign = "−" if coefficient < 0 else ("+" if terms else "")
        terms.append({"sign": sign, "mantissa": mantissa, "exponent": exponent, "power": power})
    return terms


def roots(target: TransferFunction) -> list[dict[str, str]]:
    """Zeros and poles, one line per distinct real root or pair: frequency [Hz] and Q."""
    return [
        *_root_lines("zero", target.zero_factors),
        *_root_lines("pole", target.pole_factors),
    ]


def _root_lines(kind: str, factors: Iterable[Factor]) -> list[dict[str, str]]:
    counted: dict[Factor, int] = {}
    for factor in factors:
        counted[factor] = counted.get(factor, 0) + 1
    return [
        {"kind": kind, "count": str(times), **_root_line(factor)}
        for factor, times in counted.items()
    ]


def _root_line(factor: Factor) -> dict[str, str]:
    frequency = factor.natural_frequency / (2 * math.pi)
    rightmost = max(r.real for r in factor.roots)
    if frequency == 0:
        return {"shape": "origin", "frequency": "0\N{NO-BREAK SPACE}Hz", "q": ""}
    half = "right half-plane" if rightmost > 0 else "left half-plane"
    if factor.degree == 1:
        return {"shape": f"real, {half}", "frequency": quantity(frequency, "Hz", 5), "q": ""}
    if math.isinf(factor.q):
        return {
            "shape": "pair, imaginary axis",
            "frequency": quantity(frequency, "Hz", 5),
            "q": "∞",
        }
    return {
        "shape": f"pair, {half}",
        "frequency": quantity(frequency, "Hz", 5),
        "q": number(abs(factor.q), 4),
    }


def gain_lines(job: Job) -> list[Row]:
    """The gain where it is finite: at DC, at the ends of the band."""
    target = job.target
    out: list[Row] = []
    if target.poles_at_origin == 0:
        at_dc = float(target.numerator[-1] / target.denominator[-1])
        out.append(("gain at DC", f"{number(at_dc, 4)}"))
    for name, f in zip(("lowest", "highest"), job.signal.band_hz, strict=True):
        level = abs(complex(target.response(f)))
        db = f" ({decibel(20 * math.log10(level))}\N{NO-BREAK SPACE}dB)" if level > 0 else ""
        out.append((f"|H| at the {name} frequency", number(level, 4) + db))
    return out


def requirements(job: Job) -> list[Row]:
    """Band, limits, signal and board in words."""
    signal, board, accept = job.signal, job.board, job.accept
    low, high = signal.band_hz
    waveform = "a sine of any frequency" if signal.swing == "sine" else "any waveform"
    signs = {"no": "that of H(s)", "yes": "inverted, −H(s)", "either": "either"}
    share = accept.yield_share
    return [
        ("band", f"{stated(low, 'Hz')} to {stated(high, 'Hz')}"),
        ("magnitude within", stated(accept.magnitude_db, "dB")),
        ("phase within", stated(accept.phase_deg, "deg")),
        ("yield at least", "no limit stated" if share is None else stated(share, "%")),
        ("largest input", f"{stated(signal.input_peak, 'V')} peak, {waveform}"),
        ("supply", f"{stated(board.supply[0], 'V')} and +{stated(board.supply[1], 'V')}"),
        ("source resistance", stated(signal.source_resistance, "Ω")),
        ("load", "none" if signal.load is None else stated(signal.load, "Ω")),
        ("sign of the output", signs[board.inverted]),
        ("resistors", _rule(board.resistors, "Ω")),
        ("capacitors", _rule(board.capacitors, "F")),
        *([("values fixed by hand", _fixed(board.fixed))] if board.fixed else []),
        *population_rows(job),
        (f"op-amp ({spelled(board.op_amp.kind)}, typical figures)", _figures(board.op_amp)),
    ]


def _rule(rule: PartRule, unit: str) -> str:
    limits = f"{stated(rule.smallest, unit)} to {stated(rule.largest, unit)}"
    if rule.stock:
        held = sorted({i.tolerance for i in rule.stock})
        grades = " to ".join(stated(t, "%") for t in dict.fromkeys((held[0], held[-1])))
        values = f"{rule.values.size} value{'' if rule.values.size == 1 else 's'}"
        return f"from stock: {values}, {grades}, {limits}"
    return f"{rule.series}, {stated(rule.tolerance, '%')}, {limits}"


def _fixed(fixed: Sequence[tuple[str, float]]) -> str:
    return ", ".join(f"{ref} = {stated(v, 'F' if ref[0] == 'C' else 'Ω')}" for ref, v in fixed)


def _figures(amp: OpAmp) -> str:
    return ", ".join(
        (
            f"{stated(amp.gain_bandwidth, 'Hz')} gain-bandwidth",
            f"{stated(round(20 * math.log10(amp.open_loop_gain), 1), 'dB')} open-loop gain",
            f"{number(amp.slew_rate / 1e6)}\N{NO-BREAK SPACE}V/µs",
            f"offset {stated(amp.offset, 'V')}",
            f"bias {stated(amp.bias_current, 'A')}",
            stated(amp.voltage_noise, "V/√Hz"),
            stated(amp.current_noise, "A/√Hz"),
            f"headroom {stated(amp.swing_headroom, 'V')}",
            f"{stated(amp.output_current, 'A')} output",
        )
    )
