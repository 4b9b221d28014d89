"""``polewright forms JOB.toml``: the realizations for a job, side by side."""

from __future__ import annotations

from pathlib import Path

import click

from netlist.cli.options import as_json, job_file, with_traceback
from netlist.cli.running import Result

__all__ = ["command"]


@click.command("forms")
@job_file
@as_json
@with_traceback
def command(job_file: Path, as_json: bool) -> Result:
    """Compare the realizations for JOB.toml; write nothing.

    Spread is one standard deviation of magnitude and phase from part tolerance, the largest over
    the band.  Unless the job names a form, the one is chosen whose spread is smallest against
    the limits, magnitude or phase, whichever is worse.
    """
    from netlist.cli.summary import forms_table
    from netlist.jobfile import read_job
    from netlist.records import candidate_records, record_text
    from synth.design import compare_forms

    chosen, candidates = compare_forms(read_job(job_file))
    if as_json:
        record = {"chosen": chosen, "forms": candidate_records(candidates)}
        return Result(0, record_text(record))
    return Result(0, forms_table(chosen, candidates))
