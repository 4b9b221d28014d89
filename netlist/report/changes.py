"""What changed against an earlier design, ready for the page and the summary."""

from __future__ import annotations

from netlist.report.wording import NONE, decibel, percent, stated
from synth.shortages import Repick

__all__ = ["change_errors", "change_rows", "repick_options"]

Row = dict[str, object]


def change_rows(found: Repick) -> list[Row]:
    """Each part with another value, and why it changed."""
    others = "free to change" if found.all_free else "to meet the limits"
    rows: list[Row] = []
    for change in found.changes:
        unit = "Ω" if change.kind == "resistor" else "F"
        rows.append(
            {
                "ref": change.ref,
                "sets": change.sets or NONE,
                "before": stated(change.before, unit),
                "after": stated(change.after, unit),
                "by": percent(change.after / change.before - 1, 2),
                "why": "out of stock" if change.ref in found.missing else others,
            }
        )
    return rows


def change_errors(found: Repick) -> list[Row]:
    """Nominal error and yield before and after, as this program computes them."""
    both = (found.before, found.after)

    def row(name: str, texts: list[str]) -> Row:
        return {"name": name, "before": texts[0], "after": texts[1]}

    return [
        row("nominal rms of |ln(H/T)|", [percent(e.rms, 3) for e in both]),
        row("nominal largest, dB", [decibel(e.largest_db) for e in both]),
        row("nominal largest, deg", [decibel(e.largest_deg) for e in both]),
        row(
            "yield, boards within limits",
            [NONE if s is None else percent(s, 4) for s in (found.share_before, found.share_after)],
        ),
    ]


def repick_options(found: Repick) -> list[str]:
    """The arguments of the command that ask for the same."""
    without = [word for s in found.asked for word in ("--without", s.text)]
    bought = ["--bought", " ".join(found.bought)] if found.bought else []
    return [*without, *bought, *(["--all-free"] if found.all_free else [])]
