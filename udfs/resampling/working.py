"""Pieces of one computation shared out to threads."""

import functools
import itertools
import os
import threading
from collections.abc import Callable, Iterable
from concurrent.futures import ThreadPoolExecutor

from midspread.udfs.grouped import Control, Stopped


def work_off(pieces: Iterable[Callable[[], None]], control: Control, threads: int) -> None:
    """Run all pieces, each once, on at most so many threads; this one is among them.

    Pieces must not depend on one another and are taken in order.

    Raises
    ------
    Stopped
        When the control asked to stop; pieces not yet begun are left.
    """
    waiting = iter(pieces)
    taking = threading.Lock()

    def work() -> None:
        while not control.stopped:
            with taking:
                piece = next(waiting, None)
            if piece is None:
                return
            piece()

    first = list(itertools.islice(waiting, 2))
    waiting = itertools.chain(first, waiting)
    helpers = threads - 1 if len(first) > 1 else 0
    pending = [_pool().submit(work) for _ in range(helpers)]
    try:
        work()
    finally:
        failures = [future.exception() for future in pending]
    for failure in failures:
        if failure is not None:
            raise failure
    if control.stopped:
        raise Stopped("stopped on request")


@functools.cache
def _pool() -> ThreadPoolExecutor:
    return ThreadPoolExecutor(os.cpu_count() or 1, thread_name_prefix="midspread-resampling")
