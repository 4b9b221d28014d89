"""Arguments and options that commands share."""

from __future__ import annotations

from pathlib import Path

import click

__all__ = ["as_json", "job_file", "with_traceback"]

job_file = click.argument("job_file", metavar="JOB.toml", type=click.Path(path_type=Path))

as_json = click.option(
    "--json", "as_json", is_flag=True, help="Print the result as JSON, and nothing else."
)

with_traceback = click.option(
    "--traceback",
    is_flag=True,
    expose_value=False,
    help="On a defect, show where it happened.",
)
