"""What ``design.json`` says of boards other than the nominal one: those of the run, the worst
within tolerance, and the loops around them.

Keys and units as in `netlist.records`.
"""

from __future__ import annotations

from dataclasses import asdict

from synth.results import Design, ToleranceResult
from synth.worstcase import WorstError

__all__ = ["loop_record", "worst_record", "yield_record"]


def yield_record(design: Design) -> dict[str, object]:
    """The run of boards: how many pass, which limit the others fail first, what drives it, and
    the worst of them."""
    run = design.tolerance
    return {
        "boards": run.boards,
        "frequencies": len(run.frequency_hz),
        "passed": run.passed,
        "share": run.share,
        "low": run.low,
        "high": run.high,
        "confidence": run.confidence,
        "error_95_db": run.error_95_db,
        "seed": run.seed,
        "unstable": run.unstable,
        **_failures(run),
        "drivers": [asdict(d) for d in run.drivers],
        "worst": [{"number": b.number + 1, "limit_share": b.limit_share} for b in run.worst],
    }


def worst_record(design: Design) -> dict[str, object]:
    """The worst board within tolerance: what is reached, and what none can pass."""
    found = design.worst
    if found is None:
        return {}
    return {
        "worst_case": {
            "magnitude_db": _worst_error(found.magnitude_db),
            "phase_deg": _worst_error(found.phase_deg),
            "frequencies": found.frequencies,
        }
    }


def loop_record(design: Design) -> dict[str, object]:
    """Margins of H(s) itself, of the nominal board and over the boards of the run, where the job
    names a plant."""
    found = design.loop
    if found is None:
        return {}
    record: dict[str, object] = {"target": asdict(found.target), "nominal": asdict(found.nominal)}
    if found.boards is not None:
        run = found.boards
        record["boards"] = {
            **asdict(run),
            "stable": run.stable / run.boards,
            "share": run.share,
        }
    return {"loop": record}


def _failures(run: ToleranceResult) -> dict[str, object]:
    """Which limit the boards that fail reach first, and where."""
    found = run.failures
    if found is None:
        return {}
    return {
        "failures": {
            "boards": found.boards,
            "both": found.both,
            "first": [asdict(f) for f in found.first],
        }
    }


def _worst_error(error: WorstError) -> dict[str, object]:
    return {
        "reached": error.reached,
        "bound": error.bound,
        "everywhere": error.everywhere,
        "unlimited": error.unlimited or None,
        "meet": error.meets,
        "sign": error.sign,
        "frequency_hz": error.frequency_hz,
        "values": error.values,
        "at_low_end": list(error.low),
        "at_high_end": list(error.high),
        "between": list(error.between),
    }
