"""What was found, ready for the page: checks with their margins, values, swing, tolerance,
noise, DC, parts.  Every cell is text; nothing here computes a result."""

from __future__ import annotations

from collections.abc import Iterable

from netlist.partslist import PartLine
from netlist.report.wording import (
    NONE,
    decibel,
    number,
    percent,
    prefixed,
    quantity,
    share,
    spelled,
    stated,
)
from synth.circuit import Circuit, Passive
from synth.evidence import Check
from synth.headroom import tightest_limit
from synth.loop import LoopMargins, Percentiles
from synth.results import Candidate, Design, Drift, LoopResult, Swing

__all__ = [
    "check_rows",
    "drift_rows",
    "first_to_bite",
    "form_rows",
    "largest_noise",
    "loop_rows",
    "margin",
    "part_rows",
    "swing_rows",
    "value_rows",
]

Row = dict[str, object]
NBSP = "\N{NO-BREAK SPACE}"

# The unit of a check whose value is a count, written without decimals.
COUNTED = "unstable poles"


def margin(check: Check) -> float | None:
    """How far a value is inside its limit, negative outside, in the unit of the check."""
    if check.limit is None or check.value is None:
        return None
    # A value below the limit passes when the limit is the most, and fails when it is the least.
    at_most = (check.value <= check.limit) == check.passed
    return check.limit - check.value if at_most else check.value - check.limit


def check_rows(checks: Iterable[Check]) -> list[Row]:
    """Name, limit, value, margin and result of each check."""
    rows: list[Row] = []
    for check in checks:
        left = None if check.unit == COUNTED else margin(check)
        part = f" ({number(100 * left / check.limit, 2)} %)" if left and check.limit else ""
        result = "pass" if check.passed else "FAIL"
        if check.value is None:
            result = "no value"
        elif check.limit is None:
            result = "no limit"
        rows.append(
            {
                "name": check.name,
                "limit": "none" if check.limit is None else _limit(check.limit, check.unit),
                "value": NONE if check.value is None else _with(check.value, check.unit),
                "margin": NONE if left is None else _with(left, check.unit) + part,
                "result": result,
                "passed": check.passed,
                "limited": check.limit is not None,
                "note": prefixed(check.note),
            }
        )
    return rows


def form_rows(candidates: Iterable[Candidate], chosen: str) -> list[Row]:
    """The forms considered; figures where values were chosen for more than the one taken."""
    return [
        {
            "form": c.form,
            "chosen": c.form == chosen,
            "possible": c.possible,
            "op_amps": NONE if c.op_amps is None else str(c.op_amps),
            "spread_db": decibel(c.spread_db),
            "spread_deg": decibel(c.spread_deg),
            "reason": c.reason,
            **_figures(c),
        }
        for c in candidates
    ]


def _figures(candidate: Candidate) -> Row:
    """What a form comes to with its values, dashes where none were chosen."""
    found = candidate.figures
    if found is None:
        names = ("packages", "resistors", "capacitors", "ratio", "nominal", "yield", "interval")
        more = ("error_95", "noise", "range", "peak", "bandwidth", "verdict")
        return dict.fromkeys((*names, *more), NONE)
    assert candidate.op_amps is not None
    return {
        "packages": f"{-(-candidate.op_amps // 4)} quad or {-(-candidate.op_amps // 2)} dual",
        "resistors": str(found.resistors),
        "capacitors": str(found.capacitors),
        "ratio": number(found.value_ratio),
        "nominal": percent(found.nominal.rms),
        "yield": share(found.share),
        "interval": f"{share(found.low)} to {share(found.high)}",
        "error_95": f"{decibel(found.error_95_db)}{NBSP}dB",
        "noise": quantity(found.noise_rms, "V"),
        "range": f"{number(found.dynamic_range_db)}{NBSP}dB",
        "peak": f"{quantity(found.peak, 'V')} at {found.hottest}",
        "bandwidth": quantity(found.gain_bandwidth_needed, "Hz"),
        "verdict": candidate.verdict,
    }


def swing_rows(swings: Iterable[Swing], circuit: Circuit) -> list[Row]:
    """What each op-amp output does at the stated input."""
    return [
        {
            "amplifier": s.amplifier,
            "net": s.net,
            "block": _block(circuit, s.amplifier),
            "peak": number(s.peak),
            "peak_limit": number(s.peak_limit),
            "peak_bad": s.peak > s.peak_limit,
            "at": _where(s.peak_hz),
            "slew": number(s.slew / 1e6),
            "slew_limit": number(s.slew_limit / 1e6),
            "slew_bad": s.slew > s.slew_limit,
            "current": number(s.current * 1e3),
            "current_limit": number(s.current_limit * 1e3),
            "current_bad": s.current > s.current_limit,
        }
        for s in swings
    ]


def first_to_bite(design: Design) -> str:
    """The limit of the op-amps with the least room, in one sentence; empty without op-amps."""
    found = tightest_limit(design)
    if found is None:
        return ""
    whose = f"the {found.quantity} of {found.amplifier}" if found.amplifier else found.quantity
    room = "the op-amp has" if found.ratio >= 1 else "the op-amp has only"
    left = {
        "gain-bandwidth": "what the limits on the response need",
        "swing": "what is needed; by that factor the input may grow until it clips",
    }.get(found.quantity, "what is needed")
    return f"First to bite: {whose}. There {room} {number(found.ratio)} times {left}."


def _where(peak_hz: float | None) -> str:
    if peak_hz is None:
        return "any waveform"
    return quantity(peak_hz, "Hz") if peak_hz else "DC"


def loop_rows(loop: LoopResult | None) -> list[Row]:
    """Margins with H(s) itself, with the nominal board, and their percentiles over boards."""
    if loop is None:
        return []
    both, run = (loop.target, loop.nominal), loop.boards
    columns = ("target", "board", "p5", "p50", "p95")

    def row(name: str, quantity_of: str, unit: str) -> Row:
        spread = getattr(run, quantity_of) if run else Percentiles(p5=None, p50=None, p95=None)
        values = (*(getattr(m, quantity_of) for m in both), spread.p5, spread.p50, spread.p95)
        shown = (quantity(v, unit) if unit else number(v) for v in values)
        return {"name": name, **dict(zip(columns, shown, strict=True))}

    def poles(margins: LoopMargins) -> str:
        return NONE if margins.unstable_poles is None else str(margins.unstable_poles)

    return [
        row("crossover", "crossover_hz", "Hz"),
        row("phase margin, deg", "phase_margin_deg", ""),
        row("gain margin, dB", "gain_margin_db", ""),
        row("disk margin", "disk_margin", ""),
        {
            "name": "closed-loop poles in the right half-plane (Nyquist)",
            "target": poles(loop.target),
            "board": poles(loop.nominal),
            **dict.fromkeys(columns[2:], ""),
        },
    ]


def value_rows(circuit: Circuit) -> list[Row]:
    """Each resistor and capacitor: what it sets, the value asked for and the one chosen."""
    rows: list[Row] = []
    for part in circuit.bought:
        unit = "Ω" if part.kind == "resistor" else "F"
        rows.append(
            {
                "ref": part.ref,
                "sets": part.sets or NONE,
                "nets": f"{part.nets[0]} – {part.nets[1]}",
                "ideal": quantity(part.ideal, unit, 5),
                "value": stated(part.value, unit),
                "off": percent(part.value / part.ideal - 1, 2),
                "rule": _rule(part),
            }
        )
    return rows


def _rule(part: Passive) -> str:
    """Where a value comes from and how close the part is to it."""
    by_hand = ", by hand" if part.fixed and part.source != "fixed" else ""
    return f"{part.source}, {stated(part.tolerance, '%')}{by_hand}" if part.on_board else NONE


def largest_noise(design: Design, count: int = 8) -> list[Row]:
    """The parts that make the most of the output noise, by falling share of its power."""
    shares = sorted(design.noise.shares.items(), key=lambda item: (-item[1], item[0]))
    sets = {p.ref: p.sets for p in design.circuit.passives}
    sets |= {a.ref: a.sets or f"op-amp at net {a.output}" for a in design.circuit.amplifiers}
    return [
        {"ref": ref, "share": percent(part, 2), "sets": sets.get(ref, NONE)}
        for ref, part in shares[:count]
        if part > 0
    ]


def drift_rows(drifts: Iterable[Drift]) -> list[Row]:
    """Integrators without DC feedback and how fast they run away on their own."""
    return [
        {
            "amplifier": d.amplifier,
            "net": d.net,
            "rate": quantity(d.rate, "V/s"),
            "behind": f"with {', '.join(d.behind)} at 0 V; ever faster as it drifts"
            if d.behind
            else "",
        }
        for d in drifts
    ]


def part_rows(lines: Iterable[PartLine]) -> list[Row]:
    """The parts list."""
    rows: list[Row] = []
    for line in lines:
        unit = "Ω" if line.kind == "resistor" else "F"
        code, _, rest = line.marking.partition(" ")
        valued = line.value is not None
        tolerance = "" if line.tolerance is None else stated(line.tolerance, "%")
        rows.append(
            {
                "refs": " ".join(line.refs),
                "quantity": str(line.quantity),
                "kind": spelled(line.kind),
                "value": stated(line.value, unit) if valued else "",
                "marking": code if valued else "",
                "type": rest if valued else spelled(line.marking),
                "rule": ", ".join(filter(None, (line.series, tolerance))),
                "note": line.note,
            }
        )
    return rows


def _with(value: float, unit: str) -> str:
    """A value of a check with its unit, as plain as its table of limits wants it."""
    if unit == COUNTED:
        text = f"{value:.0f}".replace("-", "−")
    else:
        text = decibel(value) if unit in ("dB", "deg") else number(value, 4)
        if unit == "%" and value < 100 and float(text.replace("−", "-")) == 100:
            text = share(value / 100).partition(NBSP)[0]
    return f"{text}\N{NO-BREAK SPACE}{unit.replace('us', 'µs')}".strip()


def _limit(limit: float, unit: str) -> str:
    """A limit as it was stated."""
    text = number(limit, 6)
    text = text.rstrip("0").rstrip(".") if "." in text and "·" not in text else text
    return f"{text}\N{NO-BREAK SPACE}{unit.replace('us', 'µs')}".strip()


def _block(circuit: Circuit, amplifier: str) -> str:
    """Which block an op-amp belongs to, in words."""
    cell = circuit.cell_of(amplifier)
    if cell is None:
        return NONE
    return f"inverter of {cell.block}" if cell.kind == "inverter" else f"{cell.kind} {cell.block}"
