"""The values of every level of every group, sorted once for all that compares them."""

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final

import numpy as np

from midspread.udfs.declaring import Values
from midspread.udfs.drivers import DONE, Indices
from midspread.udfs.grouped import over_portions

if TYPE_CHECKING:
    from midspread.udfs.binding.computing import Work

_AT_ONCE: Final = 1 << 22  # values sorted and compared before the next groups are looked at


@dataclass(frozen=True)
class Samples:
    """Values in samples, samples in groups.

    Attributes
    ----------
    values : ndarray of float64
        All values, one sample after the other.
    starts : ndarray of int64, shape (samples + 1,)
        Sample s holds ``values[starts[s] : starts[s + 1]]``.
    groups : ndarray of int64, shape (groups + 1,)
        Group g holds the samples ``groups[g] : groups[g + 1]``.
    """

    values: Values
    starts: Indices
    groups: Indices

    @property
    def lengths(self) -> Indices:
        """Number of values of each sample."""
        return np.diff(self.starts)

    @property
    def levels(self) -> Indices:
        """Number of samples of each group."""
        return np.diff(self.groups)

    def portions(self, most_samples: int) -> Iterator[tuple[int, int]]:
        """Consecutive groups, few enough to be held sorted at once; at least one at a time."""
        ends = self.starts[self.groups]
        start, count = 0, len(self.groups) - 1
        while start < count:
            by_values = np.searchsorted(ends, ends[start] + _AT_ONCE, side="right")
            by_samples = np.searchsorted(
                self.groups, self.groups[start] + most_samples, side="right"
            )
            stop = min(max(int(min(by_values, by_samples)) - 1, start + 1), count)
            yield start, stop
            start = stop

    def in_order(self, start: int, stop: int, work: "Work") -> "Samples":
        """The groups ``start : stop`` alone, each sample sorted; NaN last, −0.0 turned into 0.0."""
        first, last = int(self.groups[start]), int(self.groups[stop])
        starts = self.starts[first : last + 1]
        values = np.empty(int(starts[-1] - starts[0]))
        starts = starts - starts[0]
        _sort_each(
            self.values[self.starts[first] : self.starts[last]], starts.tolist(), values, work
        )
        return Samples(values, starts, self.groups[start : stop + 1] - first)

    def pooled(self, work: "Work") -> Values:
        """All values of each group together, sorted, at the places of the group's samples."""
        values = np.empty_like(self.values)
        _sort_each(self.values, self.starts[self.groups].tolist(), values, work)
        return values


def _sort_each(source: Values, starts: list[int], target: Values, work: "Work") -> None:
    """Copy ``source`` to ``target`` with each stretch between two starts sorted."""

    def sort(first: int, last: int) -> None:
        begin, end = starts[first], starts[last]
        np.add(source[begin:end], 0.0, out=target[begin:end])
        for i in range(first, last):
            target[starts[i] : starts[i + 1]].sort()
        work.control.cells[DONE] += end - begin

    over_portions(np.array(starts, dtype=np.int64), sort, work.control, work.threads)


def read_samples(lists: Any) -> Samples:
    """The samples behind a column of lists of lists of numbers; a NULL list has no samples."""
    from midspread.udfs.binding.arrow_columns import numpy_view, single_chunk

    outer = single_chunk(lists)
    inner = outer.values
    groups = numpy_view(outer.offsets).astype(np.int64)
    if not len(inner):
        return Samples(np.empty(0), np.zeros(1, dtype=np.int64), np.zeros_like(groups))
    return Samples(numpy_view(inner.values), numpy_view(inner.offsets).astype(np.int64), groups)


def work_off(loop: Callable[[int, int], None], costs: Indices, work: "Work") -> None:
    """Let threads run ``loop(start, stop)`` over consecutive jobs of these costs."""
    offsets = np.concatenate((np.zeros(1, dtype=np.int64), np.cumsum(costs, dtype=np.int64)))
    over_portions(offsets, loop, work.control, work.threads)
