"""Rows of a batch brought into an order that depends on their content alone."""

import threading
from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import Final

import numpy as np

from midspread.udfs.binding.computing import Work
from midspread.udfs.declaring import Values
from midspread.udfs.drivers import Indices
from midspread.udfs.grouped import Stopped, row_numbers

_DENSE: Final = 4
_WORTH_A_THREAD: Final = 1 << 17


@dataclass(frozen=True)
class Cells:
    """Values by group, then stratum, then label; sorted within each such cell.

    Attributes
    ----------
    values : ndarray of float64
        The values of all cells, one after the other.
    offsets : ndarray of int64, shape (cells + 1,)
        Cell c holds ``values[offsets[c] : offsets[c + 1]]``; no cell is empty.
    groups, strata, labels : ndarray of int64, shape (cells,)
        What the cell's rows have in common; ranks in the batch.
    """

    values: Values
    offsets: Indices
    groups: Indices
    strata: Indices
    labels: Indices

    @property
    def sizes(self) -> Indices:
        """Number of values of each cell."""
        return np.diff(self.offsets)


def cells_of(
    values: Values, lengths: Indices, strata: Indices, labels: Indices, work: Work
) -> Cells:
    """Sort rows into cells.

    Parameters
    ----------
    values : ndarray of float64
        Group by group, NaN among them or not.
    lengths : ndarray of int64
        Number of rows of each group.
    strata, labels : ndarray of int64
        Ranks; −1 for NULL, which is a stratum of its own.
    """
    group = np.repeat(np.arange(lengths.size), lengths)
    stratum_count = int(strata.max(initial=-1)) + 2
    label_count = int(labels.max(initial=-1)) + 2
    code = (group * stratum_count + (strata + 1)) * label_count + (labels + 1)
    possible = lengths.size * stratum_count * label_count
    if possible <= _DENSE * values.size + 1024:
        counts = np.bincount(code, minlength=possible)
        present = np.flatnonzero(counts)
        number = np.cumsum(counts > 0) - 1
        own, sizes = number[code], counts[present]
    else:
        present, own, sizes = np.unique(code, return_inverse=True, return_counts=True)
    # Sixteen bits are sorted by counting, which is many times faster.
    narrow = own.astype(np.uint16) if present.size <= 1 << 16 else own
    ordered = values[np.argsort(narrow, kind="stable")]
    offsets = row_numbers(sizes.astype(np.int64))
    sort_parts(ordered, offsets, work)
    return Cells(
        ordered,
        offsets,
        present // (stratum_count * label_count),
        present // label_count % stratum_count - 1,
        present % label_count - 1,
    )


def sort_parts(values: Values, offsets: Indices, work: Work) -> None:
    """Sort each part of the values in place; numpy's sort leaves other threads running."""

    def sort(part: int) -> None:
        values[offsets[part] : offsets[part + 1]].sort()

    in_turn(sort, range(offsets.size - 1), work if values.size > _WORTH_A_THREAD else None)
    if work.control.stopped:
        raise Stopped("stopped on request")


def in_turn(do: Callable[[int], None], items: Sequence[int], work: Work | None) -> None:
    """Do something for each item; with `work`, on several threads and until asked to stop."""
    if work is None:
        for item in items:
            do(item)
        return
    waiting = iter(items)
    taking = threading.Lock()

    def serve() -> None:
        while not work.control.stopped:
            with taking:
                item = next(waiting, None)
            if item is None:
                return
            do(item)

    helpers = min(work.threads, len(items)) - 1
    if helpers < 1:
        serve()
        return
    with ThreadPoolExecutor(helpers, thread_name_prefix="midspread") as pool:
        pending = [pool.submit(serve) for _ in range(helpers)]
        serve()
    for future in pending:
        future.result()
