"""Progress of long work on standard error, where that is a terminal; silence otherwise."""

from __future__ import annotations

import os
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager

__all__ = ["Report", "colour_on", "progress"]

Report = Callable[[str, int, int], None]
"""Called with the name of the stage, how much of it is done, and of how much."""


def colour_on(stream: object) -> bool:
    """Whether to colour what goes to `stream`: a terminal, and NO_COLOR not set."""
    is_terminal = getattr(stream, "isatty", lambda: False)()
    return bool(is_terminal) and not os.environ.get("NO_COLOR")


@contextmanager
def progress() -> Iterator[Report]:
    """A bar that vanishes when the work is done."""
    if not sys.stderr.isatty():
        yield lambda stage, done, total: None
        return
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn

    console = Console(stderr=True, color_system="auto" if colour_on(sys.stderr) else None)
    columns = (
        TextColumn("{task.description}", markup=False),
        BarColumn(bar_width=30),
        TimeElapsedColumn(),
    )
    with Progress(*columns, console=console, transient=True) as bar:
        task = bar.add_task("starting", total=None)

        shown = ""

        def report(stage: str, done: int, total: int) -> None:
            nonlocal shown
            known = total if total > 1 else None
            # However short a stage is, its name is seen.
            bar.update(task, description=stage, completed=done, total=known, refresh=stage != shown)
            shown = stage

        yield report
