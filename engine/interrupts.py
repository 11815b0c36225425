"""Work on a thread of its own, so that Ctrl-C is answered at once.

While the engine computes on the main thread, Python cannot react to a signal.
"""

import threading
from collections.abc import Callable
from typing import Final, Generic, TypeVar

from midspread.engine.errors import Interrupted

Result = TypeVar("Result")

_SECONDS_BETWEEN_TICKS: Final = 0.1
_SECONDS_TO_STOP: Final = 30.0


class _Work(threading.Thread, Generic[Result]):
    def __init__(self, work: Callable[[], Result]) -> None:
        super().__init__(daemon=True, name="midspread query")
        self._work = work
        self.finished = threading.Event()
        self.result: list[Result] = []
        self.error: BaseException | None = None

    def run(self) -> None:
        try:
            self.result.append(self._work())
        except BaseException as error:  # carried over to the waiting thread
            self.error = error
        finally:
            self.finished.set()


def run_interruptibly(
    work: Callable[[], Result],
    stop: Callable[[], None],
    on_tick: Callable[[], None] | None = None,
) -> Result:
    """Run some work on another thread and wait for it.

    Parameters
    ----------
    work : callable
        What to run; its result or its error becomes that of this function.
    stop : callable
        Asks the work to end early; called upon Ctrl-C, from the waiting thread.
    on_tick : callable, optional
        Called about ten times a second while the work runs.

    Raises
    ------
    Interrupted
        After Ctrl-C, once the work has ended; after a second Ctrl-C at once.
    """
    worker = _Work(work)
    try:
        worker.start()
        if on_tick is None:
            worker.finished.wait()
        else:
            while not worker.finished.wait(_SECONDS_BETWEEN_TICKS):
                on_tick()
    except KeyboardInterrupt:
        _wait_for_end(worker.finished, stop)
        raise Interrupted("query: interrupted; nothing was changed.") from None
    except BaseException:
        _wait_for_end(worker.finished, stop)
        raise
    if worker.error is not None:
        raise worker.error
    return worker.result[0]


def _wait_for_end(finished: threading.Event, stop: Callable[[], None]) -> None:
    try:
        # A query that is just being planned may miss the first request.
        for _ in range(int(_SECONDS_TO_STOP / _SECONDS_BETWEEN_TICKS)):
            stop()
            if finished.wait(_SECONDS_BETWEEN_TICKS):
                return
    except KeyboardInterrupt:
        return
