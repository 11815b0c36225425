"""Many groups at once: sort each group's values and run compiled loops over them.

A batch of groups is worked off in portions that fit the processor's cache. Small groups are
laid out as the rows of a matrix, padded to a common width, so that one call of numpy's vectorised
sort orders all of them; large groups are sorted one by one. Nothing the size of the batch is
ever copied.
"""

import functools
import itertools
import os
import threading
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field
from typing import Final

import numpy as np
import numpy.typing as npt

from midspread.udfs.compiling import compile_driver
from midspread.udfs.declaring import Values
from midspread.udfs.drivers import DONE, STOP, Indices

_PORTION: Final = 1 << 17  # values worked on at once by one thread
_WIDTHS: Final = (
    8,
    16,
    32,
    64,
    96,
    128,
    256,
    512,
)  # small groups are padded to one of these
_SMALL: Final = _WIDTHS[-1]
_WORTH_A_THREAD: Final = 1 << 17
_EMPTY: Final = np.empty(0)
_KEPT: Final = 2 * _PORTION  # values a thread's scratch memory holds from call to call
_scratch = threading.local()


class Control:
    """Lets another thread watch the loops and stop them.

    One object may serve any number of connections; its counter only ever grows.
    """

    def __init__(self) -> None:
        self.cells = np.zeros(2, dtype=np.int64)

    def stop(self) -> None:
        """Ask every running loop to stop; the query then fails."""
        self.cells[STOP] = 1

    def reset(self) -> None:
        """Allow loops to run again."""
        self.cells[STOP] = 0

    @property
    def stopped(self) -> bool:
        """Whether `stop` has been called since the last `reset`."""
        return bool(self.cells[STOP])

    @property
    def done(self) -> int:
        """How many values the loops have finished so far."""
        return int(self.cells[DONE])


class Stopped(Exception):
    """The loops were asked to stop."""


@dataclass(frozen=True)
class Groups:
    """The values of a batch of groups, unsorted, one group after the other.

    Attributes
    ----------
    values : ndarray of float64
        All values; NULL removed, NaN kept.
    offsets : ndarray of int64, shape (groups + 1,)
        Group i holds ``values[offsets[i] : offsets[i + 1]]``.
    weights : ndarray of float64
        One weight a value, or empty.
    """

    values: Values
    offsets: Indices
    weights: Values = field(default_factory=lambda: _EMPTY)

    @property
    def lengths(self) -> Indices:
        """Number of values of each group."""
        return np.diff(self.offsets)


@dataclass(frozen=True)
class Task:
    """One compiled loop, its parameters (one row each, one column a group) and its place."""

    run: Callable[..., None]
    parameters: Values
    smallest: int
    column: int

    def __post_init__(self) -> None:
        # An array that may not be written to would have the loop compiled once more.
        writable = np.require(self.parameters, requirements=("C", "W"))
        object.__setattr__(self, "parameters", writable)


def run(
    groups: Groups,
    tasks: Sequence[Task],
    out: Values,
    rows: Indices,
    control: Control,
    threads: int,
) -> None:
    """Run every task on every group, sorting each group once.

    Parameters
    ----------
    groups : Groups
        The batch.
    tasks : sequence of Task
        What to compute; task t of group g writes to ``out[rows[g], t.column:]``.
    out : ndarray of float64, two-dimensional
        Prefilled with NULL.
    rows : ndarray of int64
        First row of ``out`` for each group, and one more for the end.
    control : Control
        Watched for a request to stop.
    threads : int
        At most so many threads work on the batch.

    Raises
    ------
    Stopped
        When the control asked the loops to stop.
    """
    lengths = groups.lengths

    def work_off(start: int, stop: int) -> None:
        _work_off(groups, lengths, start, stop, tasks, out, rows, control)

    over_portions(groups.offsets, work_off, control, threads)


def over_portions(
    offsets: Indices, work_off: Callable[[int, int], None], control: Control, threads: int
) -> None:
    """Call ``work_off(start, stop)`` for portions of the groups, several threads taking turns.

    Raises
    ------
    Stopped
        When the control asked the loops to stop.
    """
    portions = _portions(offsets)
    total = int(offsets[-1] - offsets[0])
    helpers = min(threads - 1, len(portions) - 1, total // _WORTH_A_THREAD)
    waiting = iter(portions)
    taking = threading.Lock()

    def work() -> None:
        while not control.stopped:
            with taking:
                portion = next(waiting, None)
            if portion is None:
                return
            work_off(*portion)

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


def _portions(offsets: Indices) -> list[tuple[int, int]]:
    """Consecutive runs of groups holding about _PORTION values each (more where one group does)."""
    groups = len(offsets) - 1
    bounds = []
    start = 0
    while start < groups:
        stop = int(np.searchsorted(offsets, offsets[start] + _PORTION, side="right")) - 1
        stop = min(max(stop, start + 1), groups)
        bounds.append((start, stop))
        start = stop
    return bounds


def _work_off(
    groups: Groups,
    lengths: Indices,
    start: int,
    stop: int,
    tasks: Sequence[Task],
    out: Values,
    rows: Indices,
    control: Control,
) -> None:
    """Sort one portion's groups and run the tasks on them."""
    for members, width in _layouts(lengths, start, stop):
        sizes = lengths[members]
        starts = np.arange(members.size + 1) * width if width else row_numbers(sizes)
        scratch = _scratch_of(int(starts[-1]))
        sources = groups.offsets[members]
        _gather()(groups.values, sources, sizes, scratch, starts)
        weights = _EMPTY
        if groups.weights.size:
            weights = np.empty_like(scratch)
            _gather()(groups.weights, sources, sizes, weights, starts)
        _sort(scratch, weights, starts, width)
        for task in tasks:
            task.run(
                scratch,
                weights,
                starts,
                sizes,
                members,
                task.parameters,
                task.smallest,
                out,
                rows,
                task.column,
                control.cells,
            )


def _scratch_of(size: int) -> Values:
    """Memory to sort in; a thread's own is used again, as fresh pages cost more than the sort."""
    if size > _KEPT:
        return np.empty(size)
    kept: Values | None = getattr(_scratch, "values", None)
    if kept is None:
        kept = _scratch.values = np.empty(_KEPT)
    return kept[:size]


def _layouts(lengths: Indices, start: int, stop: int) -> Iterator[tuple[Indices, int]]:
    """Which groups are laid out together, and how wide; width 0 means one after the other."""
    sizes = lengths[start:stop]
    if sizes.size == 1 and sizes[0] > _SMALL:
        yield np.array([start], dtype=np.int64), 0
        return
    widths = _width_of()[np.minimum(sizes, _SMALL + 1)]
    for width in (0, *_WIDTHS):
        members = np.flatnonzero(widths == width)
        if members.size:
            yield members + start, width


@functools.cache
def _width_of() -> Indices:
    """Matrix width for each small group size; 0 for the larger ones."""
    sizes = np.arange(_SMALL + 1)
    chosen = np.zeros(_SMALL + 2, dtype=np.int64)
    chosen[:-1] = np.array(_WIDTHS)[np.searchsorted(_WIDTHS, sizes)]
    return chosen


def _sort(scratch: Values, weights: Values, starts: Indices, width: int) -> None:
    """Sort each group in place; weights travel along, in an order of their own within ties."""
    if width:
        matrix = scratch.reshape(-1, width)
        if weights.size:
            _sort_with(matrix, weights.reshape(-1, width))
        else:
            matrix.sort(axis=1)
        return
    for start, stop in itertools.pairwise(starts.tolist()):
        if weights.size:
            _sort_with(scratch[np.newaxis, start:stop], weights[np.newaxis, start:stop])
        else:
            scratch[start:stop].sort()


def _sort_with(matrix: Values, weights: Values) -> None:
    """Sort rows by value, then weight: the order the rows arrived in must not show."""
    order = np.argsort(weights, axis=1)
    matrix[:] = np.take_along_axis(matrix, order, axis=1)
    weights[:] = np.take_along_axis(weights, order, axis=1)
    order = np.argsort(matrix, axis=1, kind="stable")
    matrix[:] = np.take_along_axis(matrix, order, axis=1)
    weights[:] = np.take_along_axis(weights, order, axis=1)


def _copy_groups(
    values: Values, sources: Indices, sizes: Indices, target: Values, starts: Indices
) -> None:
    """Copy group r to ``target[starts[r] : starts[r + 1]]`` and pad it with NaN, which sorts last.

    Adding 0.0 turns −0.0, which would sort to either side of 0.0, into 0.0.
    """
    for r in range(sources.size):
        source = sources[r]
        start = starts[r]
        for i in range(sizes[r]):
            target[start + i] = values[source + i] + 0.0
        target[start + sizes[r] : starts[r + 1]] = np.nan


@functools.cache
def _gather() -> Callable[..., None]:
    return compile_driver(
        _copy_groups,
        {},
        "copy_groups",
        "void(Array(float64, 1, 'C', readonly=True), int64[::1], int64[::1], "
        "float64[::1], int64[::1])",
    )


@functools.cache
def _pool() -> ThreadPoolExecutor:
    return ThreadPoolExecutor(os.cpu_count() or 1, thread_name_prefix="midspread")


def row_numbers(counts: npt.NDArray[np.int64]) -> Indices:
    """First row of each group when group i takes ``counts[i]`` rows, and the end."""
    return np.concatenate((np.zeros(1, dtype=np.int64), np.cumsum(counts, dtype=np.int64)))
