"""The command line: ``polewright COMMAND JOB.toml``.

Each command is a file of this package, loaded when it is called, so that ``--help`` answers at
once.  Results go to standard output; progress, warnings and errors to standard error.
"""

from __future__ import annotations

import os
import sys
from collections.abc import Sequence

__all__ = ["main"]

# What sets the number of threads of the common libraries of linear algebra.
THREADS = ("OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "VECLIB_MAXIMUM_THREADS", "OMP_NUM_THREADS")


def main(arguments: Sequence[str] | None = None) -> None:
    """Run the command line and end the process with its exit code.

    Matrices are multiplied by one thread, whatever the machine and its settings: several round
    by their number, and the same job is to give the same bytes.
    """
    os.environ.update(dict.fromkeys(THREADS, "1"))
    from netlist.cli.running import run

    sys.exit(run(list(sys.argv[1:] if arguments is None else arguments)))
