"""What each choice of estimator, re-expression and rule makes of a difference of two samples."""

import functools
import math
from collections.abc import Callable
from typing import Final

import numpy as np

from midspread.udfs.arithmetic.order_statistics import (
    NORMAL_QUARTILE,
    distance,
    median_sorted,
    midpoint,
)
from midspread.udfs.arithmetic.quickselect import put_in_place
from midspread.udfs.arithmetic.windows import first_not_below
from midspread.udfs.compiling import compile_driver
from midspread.udfs.declaring import NULL, Values, compiled
from midspread.udfs.drivers import DONE, STOP, Indices
from midspread.udfs.location.trimming import cut_from_each_tail, trimmed_mean
from midspread.udfs.scale.winsorized import winsorized_deviation
from midspread.udfs.sensitivity.pooled import Windows, loses, pool, re_express, split

WIDTH: Final = 6
"""Figures of a choice, at the places below; those of two levels with the baseline first."""
N: Final = 0
ESTIMATE: Final = 2
ROOT: Final = 3
"""√ of the winsorized sums of squared deviations; for the median its standard errors."""
SCALE: Final = 5

TIE: Final = 2.0**-50
"""Differences within this share of the values' size are rounding and count as 0."""
_MCKEAN_SCHRADER: Final = 2.5758293035489004
"""Φ⁻¹(0.995): the order statistics that a median's standard error is read from."""


def _over_choices(
    values: Values,
    starts: Indices,
    pairs: Indices,
    powers: Values,
    windows: Windows,
    shares: Values,
    out: Values,
    control: Indices,
) -> None:
    """Fill ``out[r, choice]`` for the samples pairs[r], the baseline, and pairs[r] + 1.

    Choices come re-expression by re-expression, rule by rule, estimator by estimator;
    ``windows[r, power, rule]`` says what a rule keeps. What would lose a value stays NULL.
    """
    rules = windows.shape[2]
    for r in range(pairs.size):
        s = pairs[r]
        m, n = starts[s + 1] - starts[s], starts[s + 2] - starts[s + 1]
        x, labels = np.empty(m + n), np.empty(m + n, np.int8)
        pool(values[starts[s] : starts[s + 1]], values[starts[s + 1] : starts[s + 2]], x, labels)
        choice = 0
        for p in range(powers.size):
            if loses(x, powers[p]):
                choice += rules * shares.size
                continue
            y = np.empty(m + n)
            size = 0.0
            if math.isnan(x[m + n - 1]):
                y[:] = math.nan
            else:
                size = re_express(x, powers[p], y)
            of_baseline, of_other = np.empty(m), np.empty(n)
            baseline_places, other_places = np.empty(m, np.int64), np.empty(n, np.int64)
            split(y, labels, 0, of_baseline, baseline_places)
            split(y, labels, 1, of_other, other_places)
            for rule in range(rules):
                if control[STOP] != 0:
                    return
                first, stop = windows[r, p, rule, 0], windows[r, p, rule, 1]
                a = first_not_below(baseline_places, first)
                b = first_not_below(baseline_places, stop)
                c, d = first_not_below(other_places, first), first_not_below(other_places, stop)
                _figures(of_baseline[a:b], of_other[c:d], size, shares, out[r, choice:])
                choice += shares.size
        control[DONE] += m + n


@functools.cache
def choices_loop() -> Callable[..., None]:
    """`_over_choices`, compiled or loaded on the first call."""
    return compile_driver(
        _over_choices,
        {},
        "over_choices",
        "void(float64[::1], int64[::1], int64[::1], float64[::1], int64[:, :, :, ::1], "
        "float64[::1], float64[:, :, ::1], int64[::1])",
    )


@compiled
def _figures(baseline: Values, other: Values, size: float, shares: Values, out: Values) -> None:
    """The figures of every estimator on two sorted samples, which may be empty."""
    m, n = baseline.size, other.size
    for e in range(shares.size):
        out[e, N], out[e, N + 1] = m, n
    if m == 0 or n == 0:
        return
    if math.isnan(baseline[0]) or math.isnan(other[0]):
        for e in range(shares.size):
            out[e, ESTIMATE:] = math.nan
        return
    scale = pooled_scale(baseline, other)
    for e in range(shares.size):
        share = shares[e]
        low, high = trimmed_mean(baseline, share), trimmed_mean(other, share)
        out[e, ESTIMATE] = without_rounding(high - low, size, low, high)
        out[e, ROOT] = _root(baseline, share)
        out[e, ROOT + 1] = _root(other, share)
        out[e, SCALE] = scale


@compiled
def without_rounding(difference: float, size: float, one: float, other: float) -> float:
    """A difference, 0 where it is no more than the rounding of values of that size."""
    is_small = abs(difference) <= TIE * (size + max(abs(one), abs(other)))
    if is_small and not math.isinf(difference):
        return 0.0
    return difference


@compiled
def _root(x: Values, share: float) -> float:
    if share == 0.5:
        return median_error(x)
    return winsorized_deviation(x, cut_from_each_tail(x.size, share), 1.0)


@compiled
def median_error(x: Values) -> float:
    """McKean and Schrader's standard error of the median of sorted values; NULL for one."""
    n = x.size
    if n < 2:
        return NULL
    c = median_place(n)
    return distance(x[n - c], x[c - 1]) / (2.0 * _MCKEAN_SCHRADER)


@compiled
def median_place(n: int) -> int:
    """Which order statistic from either end the median's standard error is read from."""
    return max(1, int(np.rint((n + 1) / 2.0 - _MCKEAN_SCHRADER * math.sqrt(n / 4.0))))


@compiled
def pooled_scale(baseline: Values, other: Values) -> float:
    """Median of the distances from the own sample's median, as a normal standard deviation."""
    m, n = baseline.size, other.size
    away = np.empty(m + n)
    middle = median_sorted(baseline)
    for i in range(m):
        away[i] = distance(baseline[i], middle)
    middle = median_sorted(other)
    for i in range(n):
        away[m + i] = distance(other[i], middle)
    half = (m + n) // 2
    upper = put_in_place(away, half)
    lower = upper
    if (m + n) % 2 == 0:
        lower = away[0]
        for i in range(half):
            lower = max(lower, away[i])
    return midpoint(lower, upper) / NORMAL_QUARTILE
