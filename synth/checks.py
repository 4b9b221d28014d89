"""The predicted lines of the verdict: yield, stability, loop margins, swing, slew and current.

The nominal response is the simulator's to judge; its two checks stand before these.
"""

from __future__ import annotations

from synth.circuit import Circuit
from synth.evidence import Check
from synth.job import Job
from synth.limits import swing_checks
from synth.loop import loop_checks, loop_margins
from synth.nodal import compile_circuit
from synth.quantities import show_share
from synth.results import LoopResult, Swing, ToleranceResult
from synth.stability import poles_check, poles_on_the_right, right_of_target
from synth.tolerance import loop_yield_check

__all__ = ["board_checks", "loop_of_board", "yield_check"]


def board_checks(
    job: Job, circuit: Circuit, swing: tuple[Swing, ...], loop: LoopResult | None
) -> tuple[Check, ...]:
    """Every predicted check of the nominal board, and of the loop around any."""
    names = {c.amplifier: _cell_name(circuit, c.amplifier) for c in circuit.cells}
    return (
        poles_check(compile_circuit(circuit).poles(), job.target),
        *(loop_checks(job.loop, loop.nominal) if job.loop and loop else ()),
        *((loop_yield_check(loop.boards),) if loop and loop.boards else ()),
        *swing_checks(swing, names),
    )


def loop_of_board(job: Job, circuit: Circuit, *, inverted: bool) -> LoopResult | None:
    """Margins of the job's loop; an inverted board is taken to be inverted once more."""
    if job.loop is None:
        return None
    program = compile_circuit(circuit)
    sign = -1.0 if inverted else 1.0
    right = int(poles_on_the_right(program.poles()[None], job.target)[0])
    excess = right - right_of_target(job.target)
    return LoopResult(
        target=loop_margins(job.loop, job.target),
        nominal=loop_margins(
            job.loop, job.target, lambda f: sign * program.solve(f), excess=excess
        ),
    )


def _cell_name(circuit: Circuit, amplifier: str) -> str:
    cell = circuit.cell_of(amplifier)
    if cell is None:
        return amplifier
    return f"inverter of {cell.block}" if cell.kind == "inverter" else cell.block


def yield_check(tolerance: ToleranceResult, job: Job) -> Check:
    """The yield against the job's limit, where it states one."""
    limit = job.accept.yield_share
    note = (
        f"{tolerance.passed} of {tolerance.boards} boards, "
        f"{show_share(tolerance.low)} to {show_share(tolerance.high)} at "
        f"{100 * tolerance.confidence:.0f} % confidence"
    )
    percent = 100 * tolerance.share
    return Check.at_least("yield", percent, None if limit is None else 100 * limit, "%", note)
