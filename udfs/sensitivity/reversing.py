"""The fewest values whose removal turns the sign of a difference of two sorted samples."""

import functools
import math
from collections.abc import Callable
from typing import Final

import numpy as np

from midspread.udfs.arithmetic.order_statistics import midpoint
from midspread.udfs.arithmetic.running import add
from midspread.udfs.compiling import compile_driver
from midspread.udfs.declaring import Values, compiled
from midspread.udfs.drivers import DONE, STOP, Indices
from midspread.udfs.sensitivity.pooled import largest_finite

WIDTH: Final = 10
"""Figures of a group, at the places below."""
DIFFERENCE: Final = 0
ROWS: Final = 1
AFTER: Final = 2
FROM_OTHER: Final = 3
"""How many, the lowest and the highest, at places 3 to 5."""
FROM_BASELINE: Final = 6
"""The same at places 6 to 8."""
STATE: Final = 9
FOUND, HAD_NAN, INFINITE, NO_DIFFERENCE, LASTING = range(5)
"""What the state may be."""

_ROUNDING: Final = 2.0**-51
_HUGE: Final = 2.0**900
_SMALL_UNIT: Final = 2.0**-200


def _over_groups_to_reverse(
    values: Values,
    starts: Indices,
    pairs: Indices,
    share: float,
    out: Values,
    control: Indices,
) -> None:
    """Fill ``out[r]``; the baseline of pair r is sample pairs[r], the other is the next one."""
    for r in range(pairs.size):
        if control[STOP] != 0:
            return
        s = pairs[r]
        baseline = values[starts[s] : starts[s + 1]]
        other = values[starts[s + 1] : starts[s + 2]]
        fewest_to_reverse(baseline, other, share, out[r], control)
        control[DONE] += baseline.size + other.size


@functools.cache
def reversing_loop() -> Callable[..., None]:
    """`_over_groups_to_reverse`, compiled or loaded on the first call."""
    return compile_driver(
        _over_groups_to_reverse,
        {},
        "over_groups_to_reverse",
        "void(float64[::1], int64[::1], int64[::1], float64, float64[:, ::1], int64[::1])",
    )


@compiled
def fewest_to_reverse(
    baseline: Values, other: Values, share: float, out: Values, control: Indices
) -> None:
    """Write the figures of two sorted, non-empty samples, NaN last; out is prefilled with NULL."""
    m, n = baseline.size, other.size
    if math.isnan(baseline[m - 1]) or math.isnan(other[n - 1]):
        out[DIFFERENCE] = math.nan
        out[STATE] = HAD_NAN
        return
    unit = 1.0
    if (
        max(largest_finite(baseline), largest_finite(other)) > _HUGE
    ):  # so that no sum leaves the range
        unit = _SMALL_UNIT
    of_baseline, size_of_baseline = _whole(baseline, share, unit)
    of_other, size_of_other = _whole(other, share, unit)
    difference = of_other - of_baseline
    if math.isnan(difference):
        out[DIFFERENCE] = math.nan
        out[STATE] = INFINITE
        return
    if not _exceeds(difference, size_of_baseline + size_of_other):
        out[DIFFERENCE] = 0.0
        out[STATE] = NO_DIFFERENCE
        return
    out[DIFFERENCE] = difference / unit
    out[STATE] = LASTING
    if difference > 0.0:
        higher, lower = other, baseline
        from_higher, from_lower, sign = FROM_OTHER, FROM_BASELINE, -1.0
    else:
        higher, lower = baseline, other
        from_higher, from_lower, sign = FROM_BASELINE, FROM_OTHER, 1.0
    a, b, after = _fewest(higher, lower, share, unit, control)
    if a < 0:
        return
    out[STATE] = FOUND
    out[ROWS] = a + b
    out[AFTER] = sign * after / unit
    out[from_higher] = a
    out[from_lower] = b
    if a > 0:
        out[from_higher + 1] = higher[higher.size - a]
        out[from_higher + 2] = higher[higher.size - 1]
    if b > 0:
        out[from_lower + 1] = lower[0]
        out[from_lower + 2] = lower[b - 1]


@compiled
def _fewest(
    higher: Values, lower: Values, share: float, unit: float, control: Indices
) -> tuple[int, int, float]:
    """How many of the largest and of the smallest go, and by how much the two then differ.

    Each side's statistic only moves one way as more are removed, so the fewest of the smallest
    that are needed beside the a largest fall as a grows.
    """
    m, n = higher.size, lower.size
    means, sizes, removed = np.empty(m), np.empty(m), np.empty(m, np.int64)
    count = _while_removing(higher, share, unit, False, means, sizes, removed)
    other_means, other_sizes = np.empty(n), np.empty(n)
    other_removed = np.empty(n, np.int64)
    other_count = _while_removing(lower, share, unit, True, other_means, other_sizes, other_removed)
    if control[STOP] != 0:
        return -1, -1, 0.0
    best_a = best_b = -1
    best_after = 0.0
    j = other_count - 1
    for i in range(count):
        while j > 0 and _exceeds_by(other_means[j - 1] - means[i], sizes[i] + other_sizes[j - 1]):
            j -= 1
        after = other_means[j] - means[i]
        if not _exceeds_by(after, sizes[i] + other_sizes[j]):
            continue
        a, b = removed[i], other_removed[j]
        fewer = best_a < 0 or a + b < best_a + best_b
        # Of equally small sets the one that turns the difference farthest, then more of the
        # higher side.
        if fewer or (a + b == best_a + best_b and after >= best_after):
            best_a, best_b, best_after = a, b, after
    return best_a, best_b, best_after


@compiled
def _exceeds(difference: float, size: float) -> bool:
    """Whether a difference of means is more than the rounding of values of this mean size."""
    return abs(difference) > _ROUNDING * size or math.isinf(difference)


@compiled
def _exceeds_by(difference: float, size: float) -> bool:
    """The same, with the sign wanted."""
    return difference > 0.0 and _exceeds(difference, size)


@compiled
def _while_removing(
    x: Values,
    share: float,
    unit: float,
    smallest_go: bool,
    means: Values,
    sizes: Values,
    removed: Indices,
) -> int:
    """The statistic after 0, 1, 2, … values went, at least one being left; how many are known.

    Those without one, which hold infinities of both signs, are left out. sizes holds the means
    of the absolute values, which rounding is measured by.
    """
    n = x.size
    sums, lost, absolute = np.empty(n + 1), np.empty(n + 1), np.empty(n + 1)
    _sums_from_the_middle(x, unit, sums, lost, absolute)
    negative = positive = 0
    while negative < n and x[negative] == -math.inf:
        negative += 1
    while positive < n and x[n - 1 - positive] == math.inf:
        positive += 1
    count = 0
    for gone in range(n):
        start = gone if smallest_go else 0
        g = _cut(n - gone, share)
        first, stop = start + g, start + n - gone - g
        if stop - first <= 2:
            mean = midpoint(x[first] * unit, x[stop - 1] * unit)
            size = max(abs(x[first] * unit), abs(x[stop - 1] * unit))
        else:
            size = (absolute[stop] - absolute[first]) / (stop - first)
            down, up = first < negative, stop > n - positive
            if down or up:
                mean = math.nan if down and up else (-math.inf if down else math.inf)
            else:
                total, error = add(sums[stop], 0.0, -sums[first])
                mean = (total + (error + (lost[stop] - lost[first]))) / (stop - first)
        if not math.isnan(mean):
            means[count] = mean
            # An infinite mean has no rounding.
            sizes[count] = 0.0 if math.isinf(mean) else size
            removed[count] = gone
            count += 1
    return count


@compiled
def _whole(x: Values, share: float, unit: float) -> tuple[float, float]:
    """The statistic of all values, NaN where it has none, and the mean of their sizes."""
    n = x.size
    g = _cut(n, share)
    kept = x[g : n - g]
    if kept.size <= 2:
        low, high = kept[0] * unit, kept[kept.size - 1] * unit
        return midpoint(low, high), max(abs(low), abs(high))
    if math.isinf(kept[0]) or math.isinf(kept[kept.size - 1]):
        return kept[0] + kept[kept.size - 1], 0.0
    total = lost = size = 0.0
    for i in range(kept.size):
        v = kept[i] * unit
        total, lost = add(total, lost, v)
        size += abs(v)
    return (total + lost) / kept.size, size / kept.size


@compiled
def _cut(n: int, share: float) -> int:
    """g = ⌊share · n⌋; at share 0.5 so many that the one or two middle values are left."""
    return min(int(share * n), (n - 1) // 2)


@compiled
def _sums_from_the_middle(
    x: Values, unit: float, sums: Values, lost: Values, absolute: Values
) -> None:
    """Running sums as total + lost, 0 at the middle, so that wild tails take no digits.

    The sum of x[i:j] is the difference of entries j and i. Infinities count as 0 here.
    """
    middle = x.size // 2
    sums[middle] = lost[middle] = absolute[middle] = 0.0
    for i in range(middle, x.size):
        v = 0.0 if math.isinf(x[i]) else x[i] * unit
        sums[i + 1], lost[i + 1] = add(sums[i], lost[i], v)
        absolute[i + 1] = absolute[i] + abs(v)
    for i in range(middle - 1, -1, -1):
        v = 0.0 if math.isinf(x[i]) else x[i] * unit
        sums[i], lost[i] = add(sums[i + 1], lost[i + 1], -v)
        absolute[i] = absolute[i + 1] - abs(v)
