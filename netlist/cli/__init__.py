"""The command line: ``polewright COMMAND JOB.toml``.

Each command is a file of this package, loaded when it is called, so that ``--help`` answers at
once.  Results go to standard output; progress, warnings and errors to standard error.
"""

from __future__ import annotations

import sys
from collections.abc import Sequence

__all__ = ["main"]


def main(arguments: Sequence[str] | None = None) -> None:
    """Run the command line and end the process with its exit code."""
    from netlist.cli.running import run

    sys.exit(run(list(sys.argv[1:] if arguments is None else arguments)))
