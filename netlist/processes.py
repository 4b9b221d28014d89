"""Work spread over processes of our own, one a core: the forms of a job, compared side by side.

The processes are started afresh and leave a terminal's interrupt to the command that started
them; they end with it, however it ends.
"""

from __future__ import annotations

import multiprocessing
import os
import signal
import threading
from collections.abc import Callable, Iterable, Iterator
from contextlib import contextmanager
from typing import TypeVar

__all__ = ["Mapper", "workers"]

In = TypeVar("In")
Out = TypeVar("Out")
Mapper = Callable[[Callable[[In], Out], Iterable[In]], Iterator[Out]]

# More processes than this would take longer to start than they save.
MOST_PROCESSES = 4


@contextmanager
def workers() -> Iterator[Mapper]:  # type: ignore[type-arg]
    """A function like ``map``, whose calls run in processes, results in their order.

    The processes start with the first call; with one core there are none.
    """
    cores = len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count()
    count = min(cores or 1, MOST_PROCESSES)
    if count == 1:
        yield map
        return
    from concurrent.futures import ProcessPoolExecutor

    pool = ProcessPoolExecutor(count, multiprocessing.get_context("spawn"), initializer=_prepare)
    try:
        yield pool.map
    except BaseException:
        for process in list((pool._processes or {}).values()):
            process.terminate()
        # Its thread must be done before the interpreter ends, or that complains of a closed pipe.
        pool.shutdown(wait=True, cancel_futures=True)
        raise
    finally:
        pool.shutdown(wait=False, cancel_futures=True)


def _prepare() -> None:
    """Leave an interrupt from the keyboard to the process that started this one, and end when
    that ends, even if it is killed."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    threading.Thread(target=_end_with_parent, daemon=True).start()


def _end_with_parent() -> None:
    parent = multiprocessing.parent_process()
    if parent is not None:
        parent.join()
        os._exit(1)
