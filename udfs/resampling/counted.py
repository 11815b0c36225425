"""Statistics of a resample that is given by counts, without writing the resample out.

A group's rows are sorted by value once. A resample says how often each unit was drawn, so row j
counts ``counts[unit[j]]`` times. Where rows are many for each unit, marks every so many rows hold
how many rows of each unit lie below, and their sum: a rank is then found, and a stretch summed,
in time that grows with the number of units and not with the number of rows.
"""

from typing import Final

import numpy as np
import numpy.typing as npt

from midspread.udfs.arithmetic.order_statistics import between, midpoint
from midspread.udfs.arithmetic.running import add
from midspread.udfs.declaring import Values, compiled
from midspread.udfs.drivers import Indices
from midspread.udfs.location.quantiles import quantile_place
from midspread.udfs.location.trimming import cut_from_each_tail
from midspread.udfs.resampling.statistics import Statistic

Small = npt.NDArray[np.int32]

MEAN: Final = 0
TRIMMED: Final = 1
WINSORIZED: Final = 2
QUANTILE: Final = 3
GENERAL: Final = 4
"""Forms of statistics; GENERAL is any other, computed on the resample written out."""

TAME: Final = 2.0**960
"""Sums of values within ± this bound stay finite; other groups are computed as GENERAL."""

_ROWS_A_UNIT: Final = 4
_LEAST_STEP: Final = 128
_BLOCK: Final = 64


def form_of(statistic: Statistic) -> int:
    """How the statistic is computed from counts."""
    name, parameters = statistic.function.name, statistic.parameters
    if name in ("trimmed_mean", "winsorized_mean") and parameters == (0.0,):
        return MEAN
    return {"trimmed_mean": TRIMMED, "winsorized_mean": WINSORIZED, "quantile_hf": QUANTILE}.get(
        name, GENERAL
    )


@compiled
def rows_between_marks(n: int, units: int) -> int:
    """Rows from mark to mark; 0 where walking along the rows is as good."""
    step = max(_ROWS_A_UNIT * units, _LEAST_STEP)
    return step if n >= 8 * step else 0


@compiled
def set_marks(
    x: Values, unit: Small, origin: float, step: int, below: Indices, sums: Values
) -> None:
    """Fill the marks: for mark b and each unit, the rows before row b · step and their sum.

    Sums of x − origin run from the middle mark outwards, so that wild values in a tail spoil no
    sum that leaves them out.
    """
    marks, units = below.shape
    for b in range(1, marks):
        for u in range(units):
            below[b, u] = below[b - 1, u]
        for j in range((b - 1) * step, b * step):
            below[b, unit[j]] += 1
    middle = marks // 2
    for upwards in range(2):
        total = np.zeros(units)
        lost = np.zeros(units)
        b = middle
        while 0 <= b < marks:
            for u in range(units):
                sums[b, u] = total[u] + lost[u]
            following = b + 1 if upwards == 1 else b - 1
            if 0 <= following < marks:
                for j in range(min(b, following) * step, max(b, following) * step):
                    u = unit[j]
                    v = x[j] - origin if upwards == 1 else origin - x[j]
                    total[u], lost[u] = add(total[u], lost[u], v)
            b = following


@compiled
def counted_value(
    x: Values,
    unit: Small,
    counts: Small,
    total: int,
    form: int,
    p: Values,
    origin: float,
    step: int,
    below: Indices,
    sums: Values,
) -> float:
    """A statistic of the resample of `total` values that has row j ``counts[unit[j]]`` times."""
    g = 0
    part = 0.5
    is_mean = False
    if form == QUANTILE:
        low, high, part = quantile_place(total, p[0], p[1])
    else:
        g = cut_from_each_tail(total, p[0])
        is_mean = p[0] != 0.5 and 2 * g < total
        low = g if is_mean else (total - 1) // 2
        high = total - 1 - low
    first = last = before_first = before_last = 0
    for end in range(2):  # one call of two takes half as long to compile
        near = end == 1 and high <= low + 1
        rank = low if end == 0 else high
        last, before_last = _row_of(
            rank, unit, counts, last, before_last, 0 if near else step, below
        )
        if end == 0:
            first, before_first = last, before_last
    low_value, high_value = x[first], x[last]
    if low_value == high_value or part == 0.0:
        return low_value
    if not is_mean:
        if form == QUANTILE:
            return high_value if part == 1.0 else between(low_value, high_value, part)
        return midpoint(low_value, high_value)
    middle = (before_first + counts[unit[first]] - g) * (low_value - origin)
    middle += (total - g - before_last) * (high_value - origin)
    middle += _sum_of_rows(x, unit, counts, origin, first + 1, last, step, sums)
    kept = total - 2 * g
    if form == WINSORIZED:
        middle += g * ((low_value - origin) + (high_value - origin))
        kept = total
    mean = origin + middle / kept
    return low_value if mean < low_value else high_value if mean > high_value else mean


@compiled
def _row_of(
    rank: int, unit: Small, counts: Small, row: int, before: int, step: int, below: Indices
) -> tuple[int, int]:
    """The row that has this rank (from 0) in the resample, and the values before that row.

    The search starts at a row known not to lie above it, or at the marks where step is not 0.
    """
    if step > 0:
        low, high = 0, below.shape[0] - 1
        before = 0
        while low < high:
            middle = (low + high + 1) // 2
            at = 0
            for u in range(counts.size):
                at += counts[u] * below[middle, u]
            if at <= rank:
                low, before = middle, at
            else:
                high = middle - 1
        row = low * step
    while before + counts[unit[row]] <= rank:
        before += counts[unit[row]]
        row += 1
    return row, before


@compiled
def _sum_of_rows(
    x: Values,
    unit: Small,
    counts: Small,
    origin: float,
    start: int,
    stop: int,
    step: int,
    sums: Values,
) -> float:
    """Σ counts · (x − origin) over start ≤ row < stop: by marks, and row by row at both ends.

    Rows are added plainly within a block; blocks are compensated.
    """
    total = lost = 0.0
    between_marks, rest = stop, stop
    if step > 0:
        lower, upper = (start + step - 1) // step, stop // step
        if lower < upper:
            between_marks, rest = lower * step, upper * step
            for u in range(counts.size):
                total, lost = add(total, lost, counts[u] * (sums[upper, u] - sums[lower, u]))
    first = start
    while first < stop:
        if first == between_marks:
            first = rest
            continue
        end = min(first + _BLOCK, between_marks if first < between_marks else stop)
        s0 = s1 = 0.0
        j = first
        while j + 2 <= end:
            s0 += counts[unit[j]] * (x[j] - origin)
            s1 += counts[unit[j + 1]] * (x[j + 1] - origin)
            j += 2
        if j < end:
            s0 += counts[unit[j]] * (x[j] - origin)
        total, lost = add(total, lost, s0 + s1)
        first = end
    return total + lost


@compiled
def written_out(x: Values, unit: Small, counts: Small, total: int) -> Values:
    """The resample itself, sorted."""
    resample = np.empty(total)
    place = 0
    for j in range(x.size):
        for _ in range(counts[unit[j]]):
            resample[place] = x[j]
            place += 1
    return resample
