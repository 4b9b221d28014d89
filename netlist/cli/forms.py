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
    """Rank the realizations for JOB.toml; write nothing.

    Each form gets standard values and a run of boards.  Among the forms that keep every limit
    with nominal parts and whose yield is not clearly below the best one's, the one with the
    fewest op-amps is chosen, then the one with the smallest 95th percentile of the error.
    """
    from netlist.cli.progress import progress
    from netlist.jobfile import read_job
    from netlist.mistakes import telling_lines

    job = read_job(job_file)
    with progress() as report:
        report("loading", 0, 1)
        from netlist.processes import workers
        from synth.design import compare_forms

        text = job.source.text if job.source else ""
        with telling_lines(text, str(job_file)), workers() as mapper:
            chosen, candidates = compare_forms(job, progress=report, mapper=mapper)

    from netlist.cli.summary import forms_table
    from netlist.records import candidate_records, record_text

    if as_json:
        record = {"chosen": chosen, "forms": candidate_records(candidates)}
        return Result(0, record_text(record))
    return Result(0, forms_table(chosen, candidates))
