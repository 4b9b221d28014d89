"""What the commands that write a pack share: design, verify, write, say what came of it."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING

from netlist.cli.progress import Report
from netlist.cli.running import Result

if TYPE_CHECKING:
    from netlist.ngspice import Simulator
    from netlist.verification import Verification
    from synth.results import Design

__all__ = ["carry_out"]


def carry_out(
    make: Callable[[Report], Design], folder: Path, *, job_name: str, as_json: bool
) -> Result:
    """Make a design, verify it in ngspice, write its pack and report it.

    Parameters
    ----------
    make
        Makes the design, telling its progress; what is slow to load is loaded in it.
    folder
        Where the pack goes.
    job_name
        File name of the job.
    as_json
        Whether the result is the record rather than a summary.
    """
    made, checked = _carried_out(make, folder, job_name=job_name)

    from netlist.cli.summary import EXIT_CODES, summary, warn
    from netlist.records import design_record, record_text, verdict_of

    warn(made, checked)
    code = EXIT_CODES[verdict_of(made, checked)]
    if as_json:
        return Result(code, record_text(design_record(made, checked)))
    return Result(code, summary(made, checked, folder=folder))


def _carried_out(
    make: Callable[[Report], Design], folder: Path, *, job_name: str
) -> tuple[Design, Verification]:
    """Design, verify and write, with progress."""
    from netlist.cli.progress import progress

    with progress() as report, _early_simulator() as simulator:
        report("loading", 0, 1)
        from netlist.pack import write_pack
        from netlist.verification import verify

        made = make(report)
        report("simulating", 0, 1)
        checked = verify(made, simulator=simulator)
        report("writing the pack", 0, 1)
        write_pack(folder, made, checked, job_name=job_name)
    return made, checked


@contextmanager
def _early_simulator() -> Iterator[Simulator | None]:
    """The simulator, its process starting while the design is made; None where it is missing,
    which the verification then says."""
    from netlist.ngspice import Simulator
    from synth.errors import SimulatorMissingError

    try:
        simulator = Simulator()
    except SimulatorMissingError:
        yield None
        return
    with simulator:
        yield simulator
