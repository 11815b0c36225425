"""Tables of one number per pair of values, never stored: sums, differences, ratios.

Every table grows along its rows. Row i has the columns ``first_column(kind, i)`` to
``b.size - 1`` and holds

========== =================== ======================================
kind       entry (i, j)        pairs
========== =================== ======================================
SUMS       a[i] + b[j]         i ≤ j, with a = b ascending
DIFFERENCES b[j] − a[i]        i < j, with a = b ascending
RATIOS     b[j] / a[i]         all, a and b positive and ascending
SHIFTS     b[j] − a[i]         all, a and b ascending
========== =================== ======================================

All values are finite. Rounding keeps the order of the exact entries, so the tables grow along
the rows, and from row to row in one direction, as computed too. A count of the entries up to a
bound is therefore one walk along a staircase.
"""

from typing import Final

import numpy as np
import numpy.typing as npt

from midspread.udfs.declaring import Values, compiled

SUMS: Final = 0
DIFFERENCES: Final = 1
RATIOS: Final = 2
SHIFTS: Final = 3

Places = npt.NDArray[np.int32]
"""One column number for each row: a staircase through a table (32 bits: memory is the limit)."""


@compiled
def entry(kind: int, a: Values, b: Values, i: int, j: int) -> float:
    """The number of the pair (i, j)."""
    if kind == SUMS:
        return a[i] + b[j]
    if kind == RATIOS:
        return b[j] / a[i]
    return b[j] - a[i]


@compiled
def first_column(kind: int, i: int) -> int:
    """The first column of row i."""
    if kind == SUMS:
        return i
    if kind == DIFFERENCES:
        return i + 1
    return 0


@compiled
def count_sums(
    x: Values, low: float, high: float, ends_low: Places, ends_high: Places
) -> tuple[int, int]:
    """Count the sums ≤ low and those ≤ high; low ≤ high.

    ``ends_low[i]`` becomes the first column of row i whose entry exceeds low, ``ends_high[i]``
    the same for high. The two walks go side by side because each step waits for its comparison;
    both take exactly n steps, from the top right corner to the diagonal.
    """
    n = x.size
    i, j, count = 0, n - 1, 0
    p, q, count_high = 0, n - 1, 0
    for _ in range(n):
        within = int(x[i] + x[j] <= low)
        within_high = int(x[p] + x[q] <= high)
        ends_low[i] = j + 1
        ends_high[p] = q + 1
        count += within * (j + 1 - i)
        count_high += within_high * (q + 1 - p)
        i += within
        j += within - 1
        p += within_high
        q += within_high - 1
    for row in range(i, n):
        ends_low[row] = row
    for row in range(p, n):
        ends_high[row] = row
    return count, count_high


@compiled
def count_differences(
    x: Values, low: float, high: float, ends_low: Places, ends_high: Places
) -> tuple[int, int]:
    """Do for differences what `count_sums` does for sums; high ≥ 0.

    The walks are windows whose two ends both move upwards.
    """
    n = x.size
    bound = max(low, 0.0)
    i, j, count = 0, 0, 0
    p, q, count_high = 0, 0, 0
    while q < n:  # the wider window arrives first
        within = int(x[j] - x[i] <= bound)
        within_high = int(x[q] - x[p] <= high)
        ends_low[i] = j
        ends_high[p] = q
        count += (1 - within) * (j - i - 1)
        count_high += (1 - within_high) * (q - p - 1)
        i += 1 - within
        j += within
        p += 1 - within_high
        q += within_high
    while j < n:
        within = int(x[j] - x[i] <= bound)
        ends_low[i] = j
        count += (1 - within) * (j - i - 1)
        i += 1 - within
        j += within
    for row in range(p, n):
        ends_high[row] = n
        count_high += n - row - 1
    for row in range(i, n):
        ends_low[row] = n
        count += n - row - 1
    if low < 0.0:
        for row in range(n):
            ends_low[row] = row + 1
        count = 0
    return count, count_high


@compiled
def count_ratios(
    a: Values, b: Values, low: float, high: float, ends_low: Places, ends_high: Places
) -> tuple[int, int]:
    """Do for ratios what `count_sums` does for sums: larger divisors reach farther."""
    return count_up_to_ratio(a, b, low, ends_low), count_up_to_ratio(a, b, high, ends_high)


@compiled
def count_up_to_ratio(a: Values, b: Values, bound: float, ends: Places) -> int:
    """Count the ratios ≤ bound; ``ends[i]`` becomes the first column of row i that exceeds it.

    Each step of the walk waits for the one before it, so four quarters of it go side by side.
    """
    rows, columns = a.size, b.size
    quarter = _steps_along(a, b, bound) // 4
    first, second, third = 0, 0, 0
    if quarter > 0:
        first = _row_after(a, b, bound, quarter)
        second = _row_after(a, b, bound, 2 * quarter)
        third = _row_after(a, b, bound, 3 * quarter)
    i, j, count = 0, 0, 0
    k, m, count_1 = first, quarter - first, 0
    p, q, count_2 = second, 2 * quarter - second, 0
    r, s, count_3 = third, 3 * quarter - third, 0
    for _ in range(quarter):
        within = int(b[j] / a[i] <= bound)
        within_1 = int(b[m] / a[k] <= bound)
        within_2 = int(b[q] / a[p] <= bound)
        within_3 = int(b[s] / a[r] <= bound)
        ends[i], ends[k], ends[p], ends[r] = j, m, q, s
        count += (1 - within) * j
        count_1 += (1 - within_1) * m
        count_2 += (1 - within_2) * q
        count_3 += (1 - within_3) * s
        i += 1 - within
        j += within
        k += 1 - within_1
        m += within_1
        p += 1 - within_2
        q += within_2
        r += 1 - within_3
        s += within_3
    while s < columns and r < rows:
        within = int(b[s] / a[r] <= bound)
        ends[r] = s
        count += (1 - within) * s
        r += 1 - within
        s += within
    for row in range(r, rows):
        ends[row] = columns
    if quarter > 0:  # two quarters wrote to the row where they meet
        _end_row(a, b, bound, first, quarter - first, ends)
        _end_row(a, b, bound, second, 2 * quarter - second, ends)
        _end_row(a, b, bound, third, 3 * quarter - third, ends)
    return count + count_1 + count_2 + count_3 + (rows - r) * columns


@compiled
def _steps_along(a: Values, b: Values, bound: float) -> int:
    """How many steps the walk takes until it has passed the last row or the last column."""
    rows, columns = a.size, b.size
    low = 0
    if b[columns - 1] / a[rows - 1] <= bound:
        high = rows - 1
        while low < high:
            middle = (low + high) // 2
            if b[columns - 1] / a[middle] <= bound:
                high = middle
            else:
                low = middle + 1
        return columns + low
    high = columns - 1
    while low < high:
        middle = (low + high) // 2
        if b[middle] / a[rows - 1] > bound:
            high = middle
        else:
            low = middle + 1
    return rows + low


@compiled
def _row_after(a: Values, b: Values, bound: float, steps: int) -> int:
    """The row that the walk stands in after so many steps."""
    low, high = max(0, steps - b.size), min(steps, a.size)
    while low < high:
        middle = (low + high) // 2
        if b[steps - middle - 1] / a[middle] <= bound:
            high = middle
        else:
            low = middle + 1
    return low


@compiled
def _end_row(a: Values, b: Values, bound: float, row: int, column: int, ends: Places) -> None:
    """Write where a row ends, from a column that the walk comes through."""
    while column < b.size and b[column] / a[row] <= bound:
        column += 1
    ends[row] = column


@compiled
def count_shifts(
    a: Values, b: Values, low: float, high: float, ends_low: Places, ends_high: Places
) -> tuple[int, int]:
    """Do for the differences of two samples what `count_sums` does for sums."""
    return _count_up_to(a, b, low, ends_low), _count_up_to(a, b, high, ends_high)


@compiled
def _count_up_to(a: Values, b: Values, bound: float, ends: Places) -> int:
    count, j = 0, 0
    for i in range(a.size):
        while j < b.size and b[j] - a[i] <= bound:
            j += 1
        ends[i] = j
        count += j
    return count


@compiled
def neighbours(kind: int, a: Values, b: Values, ends: Places) -> tuple[float, float]:
    """The largest entry before a staircase and the smallest behind it."""
    largest, smallest = -np.inf, np.inf
    for i in range(a.size):
        before = ends[i] - 1
        if before >= first_column(kind, i):
            largest = max(largest, entry(kind, a, b, i, before))
        if before + 1 < b.size:
            smallest = min(smallest, entry(kind, a, b, i, before + 1))
    return largest, smallest
