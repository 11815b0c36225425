"""The loops that draw whole units, or blocks of a series, and compute a statistic of each resample.

Both kinds of resample are counts: how often each unit, or each position of the series, was drawn.
A block length of 0 stands for units.
"""

import numpy as np

from midspread.udfs.arithmetic.running import add
from midspread.udfs.declaring import NULL, Values, compiled
from midspread.udfs.drivers import DONE, STOP, Indices
from midspread.udfs.resampling.counted import (
    MEAN,
    Small,
    counted_value,
    rows_between_marks,
    set_marks,
    written_out,
)
from midspread.udfs.resampling.randomness import below, content_key, mixed, stream
from midspread.udfs.resampling.statistics import statistic

SIGNATURE = (
    "void(float64[::1], int32[::1], int64[::1], int64[::1], int64[::1], int64[::1], float64[::1], "
    "int64, float64[::1], int64, int64, int64, float64[:, ::1], int64[::1])"
)


@compiled
def rows_key(x: Values, unit: Small) -> np.uint64:
    """A key made of the sorted values and of who they belong to."""
    key = content_key(x)
    for j in range(unit.size):
        key = mixed(key ^ np.uint64(unit[j]))
    return key


@compiled
def draw_units(key: np.uint64, sizes: Indices, counts: Small) -> int:
    """Draw as many units as there are, with replacement; returns the rows they bring along."""
    counts[:] = 0
    total = 0
    for i in range(counts.size):
        u = below(key, i, counts.size)
        counts[u] += 1
        total += sizes[u]
    return total


@compiled
def draw_blocks(key: np.uint64, block: int, counts: Small) -> int:
    """Draw blocks of a circle until it is as long as it was; the last block is cut to fit."""
    n = counts.size
    counts[:] = 0
    drawn = number = 0
    while drawn < n:
        length = min(block, n - drawn)
        start = below(key, number, n)
        # Differences from position to position first, summed up below.
        counts[start] += 1
        end = start + length
        if end < n:
            counts[end] -= 1
        elif end > n:
            counts[0] += 1
            counts[end - n] -= 1
        drawn += length
        number += 1
    running = 0
    for i in range(n):
        running += counts[i]
        counts[i] = running
    return n


@compiled
def leave_out(part: int, parts: int, sizes: Indices, counts: Small) -> int:
    """Every unit once, but for those of one part: ranks that leave this rest."""
    total = 0
    for u in range(counts.size):
        counts[u] = 0 if u % parts == part else 1
        total += counts[u] * sizes[u]
    return total


@compiled
def rows_of_units(unit: Small, units: int) -> Indices:
    """How many rows each unit has."""
    sizes = np.zeros(units, dtype=np.int64)
    for j in range(unit.size):
        sizes[unit[j]] += 1
    return sizes


@compiled
def sums_of_units(x: Values, unit: Small, units: int, origin: float) -> Values:
    """Σ (x − origin) of each unit."""
    sums = np.zeros(units)
    lost = np.zeros(units)
    for j in range(x.size):
        u = unit[j]
        sums[u], lost[u] = add(sums[u], lost[u], x[j] - origin)
    for u in range(units):
        sums[u] += lost[u]
    return sums


@compiled
def running_sums(series: Values) -> Values:
    """Sums of the first 0, 1, … n values."""
    sums = np.zeros(series.size + 1)
    total = lost = 0.0
    for i in range(series.size):
        total, lost = add(total, lost, series[i])
        sums[i + 1] = total + lost
    return sums


@compiled
def sum_of_units(sums: Values, counts: Small) -> float:
    """Σ counts · sums."""
    total = lost = 0.0
    for u in range(counts.size):
        total, lost = add(total, lost, counts[u] * sums[u])
    return total + lost


@compiled
def sum_of_blocks(key: np.uint64, block: int, sums: Values) -> float:
    """The sum of what `draw_blocks` draws, from running sums."""
    n = sums.size - 1
    total = lost = 0.0
    drawn = number = 0
    while drawn < n:
        length = min(block, n - drawn)
        start = below(key, number, n)
        end = start + length
        value = sums[min(end, n)] - sums[start]
        if end > n:
            value += sums[end - n]
        total, lost = add(total, lost, value)
        drawn += length
        number += 1
    return total + lost


def counted_resamples(
    values: Values,
    codes: Small,
    starts: Indices,
    units: Indices,
    blocks: Indices,
    parts: Indices,
    seeds: Values,
    form: int,
    p: Values,
    smallest: int,
    first: int,
    stop: int,
    out: Values,
    control: Indices,
) -> None:
    """The statistic of resamples ``first`` to ``stop`` of each group, computed from counts.

    Group r holds rows ``starts[r] : starts[r + 1]``, sorted by value and unit. Where ``parts[r]``
    is above 0, resample i leaves out part i of the units instead of drawing.
    """
    for r in range(units.size):
        x = values[starts[r] : starts[r + 1]]
        unit = codes[starts[r] : starts[r + 1]]
        n = x.size
        counts = np.zeros(units[r], dtype=np.int32)
        sizes = rows_of_units(unit, units[r])
        origin = x[n // 2]
        step = 0
        if form == MEAN:
            sums = sums_of_units(x, unit, units[r], origin)
            if blocks[r] > 0:  # a position has one row: its sum is its value
                sums = running_sums(sums)
        else:
            step = rows_between_marks(n, units[r])
        marks = n // step + 1 if step > 0 else 0
        marked_below = np.zeros((marks, units[r]), dtype=np.int64)
        marked_sums = np.zeros((marks, units[r]))
        if step > 0:
            set_marks(x, unit, origin, step, marked_below, marked_sums)
        key = stream(rows_key(x, unit), int(seeds[r]))
        end = min(stop, parts[r]) if parts[r] > 0 else stop
        for i in range(first, end):
            if control[STOP] != 0:
                return
            own = stream(key, i)
            total = n
            if parts[r] > 0:
                total = leave_out(i, parts[r], sizes, counts)
            elif blocks[r] == 0:
                total = draw_units(own, sizes, counts)
            elif form != MEAN:
                total = draw_blocks(own, blocks[r], counts)
            if total < smallest:
                out[r, i] = NULL
            elif form != MEAN:
                out[r, i] = counted_value(
                    x, unit, counts, total, form, p, origin, step, marked_below, marked_sums
                )
            else:
                if blocks[r] > 0:
                    moved = sum_of_blocks(own, blocks[r], sums)
                else:
                    moved = sum_of_units(sums, counts)
                out[r, i] = min(max(origin + moved / total, x[0]), x[n - 1])
            control[DONE] += n * (i + 1) // out.shape[1] - n * i // out.shape[1]


def written_resamples(
    values: Values,
    codes: Small,
    starts: Indices,
    units: Indices,
    blocks: Indices,
    parts: Indices,
    seeds: Values,
    form: int,  # noqa: ARG001 - one signature for both loops
    p: Values,
    smallest: int,
    first: int,
    stop: int,
    out: Values,
    control: Indices,
) -> None:
    """The same for any statistic, computed on each resample written out."""
    for r in range(units.size):
        x = values[starts[r] : starts[r + 1]]
        unit = codes[starts[r] : starts[r + 1]]
        n = x.size
        counts = np.zeros(units[r], dtype=np.int32)
        sizes = rows_of_units(unit, units[r])
        key = stream(rows_key(x, unit), int(seeds[r]))
        end = min(stop, parts[r]) if parts[r] > 0 else stop
        for i in range(first, end):
            if control[STOP] != 0:
                return
            own = stream(key, i)
            if parts[r] > 0:
                total = leave_out(i, parts[r], sizes, counts)
            elif blocks[r] == 0:
                total = draw_units(own, sizes, counts)
            else:
                total = draw_blocks(own, blocks[r], counts)
            if total < smallest:
                out[r, i] = NULL
            else:
                out[r, i] = statistic(written_out(x, unit, counts, total), p)
            control[DONE] += n * (i + 1) // out.shape[1] - n * i // out.shape[1]
