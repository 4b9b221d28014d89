"""The record of a design for other programs: what ``design.json`` holds.

Numbers are in SI units unless the key ends in another one (``_hz``, ``_db``, ``_deg``, or the
``unit`` beside a check); a number that does not exist is null, never NaN or Infinity.
``target`` is H(s) as the job states it; with ``"inverted": true`` the output net shows -H(s).
``components`` are the parts of the signal path on the board; what the job hangs on its
terminals (source resistance, load) is under ``surroundings``.

``job`` is the text of the job file, with that of every file it names, so that a pack can be
designed again from itself; ``repick`` is there where a pack was made from an earlier one.

Without a simulation both checks that rest on it stay in the list, with ``"value": null`` and
``"passed": false``: a script that asks for them by name finds them, and finds no pass.
"""

from __future__ import annotations

import json
import math
from dataclasses import asdict
from typing import TYPE_CHECKING, TypeAlias

from netlist.boardrecords import loop_record, worst_record, yield_record
from netlist.vendorlook import vendor_notices
from synth.evidence import Check, ResponseError, verdict
from synth.headroom import tightest_limit
from synth.results import Candidate, Design, ErrorFigures

if TYPE_CHECKING:
    from netlist.verification import Verification

__all__ = [
    "FORMAT",
    "all_checks",
    "all_notices",
    "candidate_records",
    "design_record",
    "record_text",
    "verdict_of",
]

FORMAT = 1
Json: TypeAlias = "dict[str, Json] | list[Json] | str | float | bool | None"


def all_checks(design: Design, verification: Verification) -> tuple[Check, ...]:
    """Every check: those of the simulation first, then the predicted ones."""
    if verification.failure is None:
        return (*verification.checks, *design.checks)
    accept = design.job.accept
    note = "not simulated"
    return (
        Check("magnitude error", accept.magnitude_db, None, "dB", False, note),
        Check("phase error", accept.phase_deg, None, "deg", False, note),
        *design.checks,
    )


def all_notices(design: Design, verification: Verification) -> list[str]:
    """Everything the user should know, each once: of the job, the design and the simulation."""
    said = (*design.job.notices, *design.notices, *vendor_notices(verification.vendor))
    return list(dict.fromkeys(said))


def verdict_of(design: Design, verification: Verification) -> str:
    """``"pass"``, ``"fail"`` or ``"unverified"``."""
    return verdict(all_checks(design, verification), verified=verification.failure is None)


def design_record(design: Design, verification: Verification) -> dict[str, Json]:
    """Everything about a design as plain dictionaries, lists, strings and numbers."""
    job = design.job
    record = {
        "format": FORMAT,
        "title": job.title,
        "form": design.form,
        "inverted": design.inverted,
        "verdict": verdict_of(design, verification),
        "target": {
            "numerator": [float(c) for c in job.target.numerator],
            "denominator": [float(c) for c in job.target.denominator],
        },
        "signal": {
            "band_hz": list(job.signal.band_hz),
            "input_peak": job.signal.input_peak,
            "swing": job.signal.swing,
        },
        "supply": list(job.board.supply),
        "op_amp": asdict(job.board.op_amp),
        "components": _components(design),
        "surroundings": _surroundings(design),
        "checks": [_check(c) for c in all_checks(design, verification)],
        "yield": yield_record(design),
        "nominal": {
            "rms_error": design.nominal.rms,
            "nearest_rms_error": design.nearest.rms,
        },
        **_choice(design),
        **_allowance(design),
        **_budget(design),
        **worst_record(design),
        "noise": {
            "band_hz": list(job.signal.band_hz),
            "output_rms_v": design.noise.output_rms,
        },
        **loop_record(design),
        "swing": [asdict(s) for s in design.swings],
        **_tightest(design),
        "offset_v": design.offset,
        "drift": [asdict(d) for d in design.drifts],
        "forms": candidate_records(design.candidates),
        "simulation": _simulation(verification),
        **_repick(design),
        **_source(design),
        "notices": all_notices(design, verification),
    }
    return {key: _finite(value) for key, value in record.items()}


def candidate_records(candidates: tuple[Candidate, ...]) -> list[Json]:
    """The forms considered, as plain dictionaries."""
    return [_finite(_candidate(c)) for c in candidates]


def _candidate(candidate: Candidate) -> dict[str, object]:
    """A form, with its figures where its values were chosen."""
    record: dict[str, object] = {
        "form": candidate.form,
        "possible": candidate.possible,
        "reason": candidate.reason,
        "op_amps": candidate.op_amps,
        "spread_db": candidate.spread_db,
        "spread_deg": candidate.spread_deg,
    }
    found = candidate.figures
    if found is None:
        return record
    assert candidate.op_amps is not None
    return {
        **record,
        "packages_of_2": -(-candidate.op_amps // 2),
        "packages_of_4": -(-candidate.op_amps // 4),
        "resistors": found.resistors,
        "capacitors": found.capacitors,
        "spread": found.value_ratio,
        "nominal_rms_error": found.nominal.rms,
        "nominal_largest_db": found.nominal.largest_db,
        "nominal_largest_deg": found.nominal.largest_deg,
        "error_95_db": found.error_95_db,
        "yield": {
            "boards": found.boards,
            "passed": found.passed,
            "low": found.low,
            "high": found.high,
        },
        "noise_rms_v": found.noise_rms,
        "dynamic_range_db": found.dynamic_range_db,
        "peak_v": found.peak,
        "hottest": found.hottest,
        "gain_bandwidth_needed_hz": found.gain_bandwidth_needed,
        "missed": list(found.missed),
        "verdict": candidate.verdict,
    }


def record_text(record: object) -> str:
    """A record as JSON text with a final newline; the same record gives the same text."""
    return json.dumps(_finite(record), indent=1, ensure_ascii=False, allow_nan=False) + "\n"


def _components(design: Design) -> list[dict[str, object]]:
    passives: list[dict[str, object]] = [
        {
            "ref": p.ref,
            "kind": p.kind,
            "value": p.value,
            "ideal": p.ideal,
            "series": p.source or None,
            "tolerance": p.tolerance,
            "fixed": p.fixed,
            "nets": list(p.nets),
            "sets": p.sets,
        }
        for p in design.circuit.bought
    ]
    amplifiers: list[dict[str, object]] = [
        {
            "ref": a.ref,
            "kind": "op_amp",
            "value": None,
            "ideal": None,
            "series": None,
            "tolerance": None,
            "fixed": False,
            "nets": [a.plus, a.minus, a.output],
            "sets": a.sets,
        }
        for a in design.circuit.amplifiers
    ]
    return [*passives, *amplifiers]


def _surroundings(design: Design) -> list[dict[str, object]]:
    return [
        {"ref": p.ref, "kind": p.kind, "value": p.value, "nets": list(p.nets), "is": p.sets}
        for p in design.circuit.passives
        if not p.on_board
    ]


def _check(check: Check) -> dict[str, object]:
    return {
        "name": check.name,
        "limit": check.limit,
        "value": check.value,
        "unit": check.unit,
        "passed": bool(check.passed),
        "note": check.note,
    }


def _choice(design: Design) -> dict[str, object]:
    """How good the choice of values is against any other, in the measure of the search."""
    found = design.certificate
    if found is None:
        return {}
    return {
        "choice": {
            "rms_error": found.rms,
            "lower_bound": found.lower_bound,
            **({"unshared_rms_error": found.unshared.rms} if found.unshared else {}),
            "gap": found.gap,
            "proven": found.proven,
            "exhausted": found.exhausted,
            "binding": [{"refs": list(b.refs), "rms_error": b.rms} for b in found.bottlenecks],
            "held": list(found.held),
            "effort": design.effort,
        }
    }


def _allowance(design: Design) -> dict[str, object]:
    """Errors with values chosen for the op-amps and without, and with op-amps off their figure."""
    found = design.allowance
    if found is None:
        return {}
    return {
        "op_amp_allowance": {
            "with": _figures(found.with_allowance),
            "without": _figures(found.without_allowance),
            "gain_bandwidth_off": [
                {"factor": found.slower_factor, **_figures(found.slower)},
                {"factor": found.faster_factor, **_figures(found.faster)},
            ],
        }
    }


def _figures(error: ErrorFigures) -> dict[str, object]:
    return {
        "rms_error": error.rms,
        "largest_db": error.largest_db,
        "largest_deg": error.largest_deg,
    }


def _budget(design: Design) -> dict[str, object]:
    """What the choice of values and what the spread of boards take of the error."""
    found = design.budget
    if found is None:
        return {}
    record = asdict(found)
    record["by_cause"] = found.by_cause
    record["tighter_part"], record["tighter_kinds"] = record.pop("part"), record.pop("kinds")
    record |= {"values_share": found.values_share, "tolerance_share": found.tolerance_share}
    return {"budget": record}


def _source(design: Design) -> dict[str, object]:
    """What the job was read from, where there is a text of it."""
    source = design.job.source
    if source is None:
        return {}
    return {"job": {"name": source.name, "text": source.text, "files": dict(source.files)}}


def _tightest(design: Design) -> dict[str, object]:
    """The limit of the op-amps with the least room, where there are op-amps."""
    found = tightest_limit(design)
    return {} if found is None else {"tightest_limit": asdict(found)}


def _repick(design: Design) -> dict[str, object]:
    """What an earlier design had to do without, and what changed."""
    found = design.repick
    if found is None:
        return {}
    return {
        "repick": {
            "without": [asdict(s) for s in found.asked],
            "already_without": [asdict(s) for s in found.earlier],
            "bought": list(found.bought),
            "all_free": found.all_free,
            "missing": list(found.missing),
            "changed": [asdict(c) for c in found.changes],
            "before": {**_error(found.before), "yield": found.share_before},
            "after": {**_error(found.after), "yield": found.share_after},
        }
    }


def _error(error: ResponseError) -> dict[str, object]:
    return {
        "rms_error": error.rms,
        "largest_db": error.largest_db,
        "largest_deg": error.largest_deg,
    }


def _simulation(verification: Verification) -> dict[str, object]:
    done = verification.failure is None
    return {
        "done": done,
        "failure": verification.failure,
        "rms_error": verification.error.rms if done and verification.error is not None else None,
        "nodal_disagreement": verification.nodal_disagreement,
        "worst_boards_disagreement": verification.worst_disagreement,
        "noise_rms_v": verification.noise_rms,
        "sine": _sine(verification),
        "vendor_model": _vendor(verification),
        "operating_point_v": dict(sorted((verification.operating_point or {}).items())),
    }


def _vendor(verification: Verification) -> dict[str, object] | None:
    """How far the response with the vendor's model is from that with the one-pole model, and
    whether it keeps the limits against H(s)."""
    look = verification.vendor
    if look is None:
        return None
    return {
        "failure": look.failure,
        "difference": look.difference and _error(look.difference),
        "keeps_limits": look.keeps_limits if look.failure is None else None,
        "against_target": [_check(c) for c in look.against_target],
    }


def _sine(verification: Verification) -> dict[str, object] | None:
    """The sine that showed whether a predicted peak clips."""
    run = verification.sine
    if run is None:
        return None
    return {
        "amplifier": run.amplifier,
        "net": run.net,
        "frequency_hz": run.frequency_hz,
        "input_peak_v": run.input_peak,
        "expected_v": run.expected,
    }


def _finite(value: object) -> Json:
    """`value` in plain Python types, numbers that are not finite as None."""
    if isinstance(value, dict):
        return {str(k): _finite(v) for k, v in value.items()}
    if isinstance(value, (list, tuple)):
        return [_finite(v) for v in value]
    if value is None or isinstance(value, (str, bool, int)):
        return value
    if hasattr(value, "item"):  # a numpy scalar
        return _finite(value.item())
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    raise TypeError(f"got a {type(value).__name__}, expected a number, text, list or dictionary")
