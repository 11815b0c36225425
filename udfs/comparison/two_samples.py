"""The figures of two sorted samples that every comparison of them rests on, in O(m + n)."""

import functools
import math
from collections.abc import Callable
from typing import Final

import numpy as np

from midspread.udfs.arithmetic.order_statistics import midpoint
from midspread.udfs.arithmetic.pair_selection import ordered_shifts
from midspread.udfs.arithmetic.sums import squares_from
from midspread.udfs.compiling import compile_driver
from midspread.udfs.declaring import NULL, Values, compiled
from midspread.udfs.drivers import DONE, STOP, Indices
from midspread.udfs.location.trimming import cut_from_each_tail, trimmed_mean
from midspread.udfs.scale.winsorized import winsorized_deviation

WIDTH: Final = 10
"""Figures of a pair: see the places below; they come for a first and a second sample."""
MEAN: Final = 0
"""Trimmed means, at places 0 and 1."""
ROOT: Final = 2
"""√ of the winsorized sums of squared deviations, at places 2 and 3."""
WINS: Final = 4
"""2 · #(first > second) + #(first = second) over all pairs of values."""
PLACEMENTS: Final = 5
"""Variances of the doubled placements, at places 5 and 6."""
SHIFT: Final = 7
"""Median of all differences first − second."""
HAS_NAN: Final = 8
HAS_INFINITE: Final = 9

_LARGEST_TO_SUBTRACT: Final = 8.9e307


def _over_pairs(
    values: Values,
    starts: Indices,
    pooled: Values,
    firsts: Indices,
    seconds: Indices,
    homes: Indices,
    share: float,
    out: Values,
    control: Indices,
) -> None:
    """Compare sample ``firsts[r]`` with sample ``seconds[r]`` into ``out[r]``.

    Where the second is −1 it is all the rest of the first one's group, whose sorted values are
    ``pooled[homes[r, 0] : homes[r, 1]]``.
    """
    for r in range(firsts.size):
        if control[STOP] != 0:
            return
        a = values[starts[firsts[r]] : starts[firsts[r] + 1]]
        if seconds[r] >= 0:
            b = values[starts[seconds[r]] : starts[seconds[r] + 1]]
        else:
            b = rest_of(pooled[homes[r, 0] : homes[r, 1]], a)
        compare(a, b, share, out[r], control)
        control[DONE] += a.size + b.size


@functools.cache
def pair_loop() -> Callable[..., None]:
    """`_over_pairs`, compiled or loaded on the first call."""
    return compile_driver(
        _over_pairs,
        {},
        "over_pairs",
        "void(float64[::1], int64[::1], float64[::1], int64[::1], int64[::1], "
        "int64[:, ::1], float64, float64[:, ::1], int64[::1])",
    )


@compiled
def rest_of(pooled: Values, own: Values) -> Values:
    """What is left of sorted values when those of a sorted part are taken away; NaN is last."""
    rest = np.empty(pooled.size - own.size)
    taken = written = 0
    for i in range(pooled.size):
        v = pooled[i]
        if taken < own.size and (v == own[taken] or (v != v and own[taken] != own[taken])):
            taken += 1
        else:
            rest[written] = v
            written += 1
    return rest


@compiled
def compare(a: Values, b: Values, share: float, out: Values, control: Indices) -> None:
    """Write the figures of two sorted, non-empty samples; with a NaN in one all are NaN."""
    m, n = a.size, b.size
    out[HAS_NAN] = int(math.isnan(a[m - 1]) or math.isnan(b[n - 1]))
    out[HAS_INFINITE] = int(
        a[0] == -math.inf or b[0] == -math.inf or a[m - 1] == math.inf or b[n - 1] == math.inf
    )
    if out[HAS_NAN] > 0.0:
        out[:HAS_NAN] = math.nan
        return
    out[MEAN] = trimmed_mean(a, share)
    out[MEAN + 1] = trimmed_mean(b, share)
    out[ROOT] = winsorized_deviation(a, cut_from_each_tail(m, share), 1.0)
    out[ROOT + 1] = winsorized_deviation(b, cut_from_each_tail(n, share), 1.0)
    in_a, in_b = np.empty(m), np.empty(n)
    wins = doubled_placements(a, b, in_a, in_b)
    out[WINS] = wins
    out[PLACEMENTS] = _variance(in_a, wins / m)
    out[PLACEMENTS + 1] = _variance(in_b, (2 * m * n - wins) / n)
    if control[STOP] == 0:
        out[SHIFT] = hodges_lehmann_shift(a, b, control)


@compiled
def doubled_placements(a: Values, b: Values, in_a: Values, in_b: Values) -> int:
    """Twice the number of values of the other sample below each value, ties counting one half.

    Returns the sum over ``in_a``: 2 · #(a > b) + #(a = b).
    """
    m, n = a.size, b.size
    i = j = total = 0
    while i < m and j < n:
        if a[i] < b[j]:
            in_a[i] = 2 * j
            total += 2 * j
            i += 1
        elif b[j] < a[i]:
            in_b[j] = 2 * i
            j += 1
        else:
            tied = a[i]
            below_a, below_b = i, j
            while i < m and a[i] == tied:
                i += 1
            while j < n and b[j] == tied:
                j += 1
            for k in range(below_a, i):
                in_a[k] = below_b + j
            for k in range(below_b, j):
                in_b[k] = below_a + i
            total += (i - below_a) * (below_b + j)
    for k in range(i, m):
        in_a[k] = 2 * n
    total += (m - i) * 2 * n
    for k in range(j, n):
        in_b[k] = 2 * m
    return total


@compiled
def _variance(v: Values, mean: float) -> float:
    """Sample variance about a mean that is known up to its rounding."""
    if v.size < 2:
        return NULL
    squares, _ = squares_from(v, 0, v.size, mean, 0.0)
    return squares / (v.size - 1)


@compiled
def hodges_lehmann_shift(a: Values, b: Values, control: Indices) -> float:
    """Median of all a_i − b_j; pairs of equal infinities have no difference and are left out."""
    a_low, a_stop = _finite(a)
    b_low, b_stop = _finite(b)
    a_high, b_high = a.size - a_stop, b.size - b_stop
    inner = (a_stop - a_low) * (b_stop - b_low)
    lowest = a_low * (b.size - b_low) + (a_stop - a_low) * b_high
    highest = a_high * (b.size - b_high) + (a_stop - a_low) * b_low
    pairs = lowest + inner + highest
    if pairs == 0:
        return NULL
    first = (pairs + 1) // 2 - lowest
    last = pairs // 2 + 1 - lowest
    lower = -math.inf if first < 1 else math.inf
    upper = -math.inf if last < 1 else math.inf
    if last >= 1 and first <= inner:
        x, y, unit = a[a_low:a_stop], b[b_low:b_stop], 1.0
        largest = max(max(abs(x[0]), abs(x[-1])), max(abs(y[0]), abs(y[-1])))
        if largest > _LARGEST_TO_SUBTRACT:  # so that no difference overflows on the way
            x, y, unit = x / 2, y / 2, 2.0
        v, w = ordered_shifts(y, x, max(first, 1), min(last, inner), control)
        lower = v * unit if first >= 1 else lower
        upper = w * unit if last <= inner else upper
    return midpoint(lower, upper)


@compiled
def _finite(x: Values) -> tuple[int, int]:
    """Where the finite values of a sorted sample start and stop."""
    low, stop = 0, x.size
    while low < stop and x[low] == -math.inf:
        low += 1
    while stop > low and x[stop - 1] == math.inf:
        stop -= 1
    return low, stop
