"""Means of the middle part once some of the sorted values are gone, without sorting again."""

import math
from typing import Final

import numpy as np

from midspread.udfs.arithmetic.windows import first_not_below
from midspread.udfs.declaring import Values, compiled
from midspread.udfs.drivers import STOP, Indices
from midspread.udfs.location.trimming import cut_of

TOTAL_SIGNATURE: Final = "void(float64[::1], float64, float64[::1])"
SIGNATURE: Final = (
    "void(float64[::1], int64[::1], float64[::1], int64[::1], int64[::1], float64[::1], float64, "
    "boolean, int64, int64, float64[:, ::1], int64[::1])"
)


@compiled
def scale_down(low: float, high: float) -> float:
    """A power of 2 by which finite values from low to high can be multiplied and then added up."""
    return 2.0**-64 if max(abs(low), abs(high)) > 2.0**900 else 1.0


def means_without(
    pooled: Values,
    ends: Indices,
    values: Values,
    starts: Indices,
    groups: Indices,
    estimates: Values,
    share: float,
    winsorize: bool,
    first: int,
    stop: int,
    out: Values,
    control: Indices,
) -> None:
    """Trimmed or winsorized mean of each group without each of its samples, and the change.

    Group g holds the samples ``groups[g] : groups[g + 1]`` of sorted values, and all of them
    sorted together in ``pooled[ends[g] : ends[g + 1]]``.
    """
    for g in range(first, stop):
        x = pooled[ends[g] : ends[g + 1]]
        n = x.size
        if n == 0 or math.isnan(x[n - 1]):
            continue
        low, high = _finite_ends(x)
        small = scale_down(low, high)
        sums, lost = running_sums(x, small)
        cut = cut_of(n, share)
        own = _mean_of_kept(x, x[:0], sums, lost, small, cut, winsorize, 0.0)
        # Means are measured from close to the one of all values: a small change keeps its digits.
        near = short(own)
        own = _mean_of_kept(x, x[:0], sums, lost, small, cut, winsorize, near)
        for s in range(groups[g], groups[g + 1]):
            if control[STOP] != 0:
                return
            gone = values[starts[s] : starts[s + 1]]
            rest = n - gone.size
            if rest == 0:
                continue
            cut = cut_of(rest, share)
            mean = _mean_of_kept(x, gone, sums, lost, small, cut, winsorize, near)
            out[s, 0] = (near + mean) / small
            if math.isfinite(own) and math.isfinite(mean):
                out[s, 1] = (mean - own) / small
            elif out[s, 0] == estimates[g]:
                out[s, 1] = 0.0
            else:
                out[s, 1] = out[s, 0] - estimates[g]


@compiled
def short(number: float) -> float:
    """A number rounded to 24 bits, so that a count times it has no rounding of its own."""
    return float(np.float32(number)) if abs(number) < 1e30 else 0.0


@compiled
def _finite_ends(x: Values) -> tuple[float, float]:
    """The lowest and the highest finite value; 0 and 0 where there is none."""
    low, high = 0, x.size - 1
    while low < x.size and math.isinf(x[low]):
        low += 1
    if low == x.size:
        return 0.0, 0.0
    while math.isinf(x[high]):
        high -= 1
    return x[low], x[high]


@compiled
def running_sums(x: Values, small: float) -> tuple[Values, Values]:
    """Sums of the finite values before each place, made small, and what rounding took."""
    sums, lost = np.empty(x.size + 1), np.empty(x.size + 1)
    total = error = 0.0
    sums[0] = lost[0] = 0.0
    for i in range(x.size):
        if math.isfinite(x[i]):
            total, more = _two_sum(total, x[i] * small)
            error += more
        sums[i + 1] = total
        lost[i + 1] = error
    return sums, lost


@compiled
def _mean_of_kept(
    x: Values,
    gone: Values,
    sums: Values,
    lost: Values,
    small: float,
    cut: int,
    winsorize: bool,
    near: float,
) -> float:
    """Mean of what is kept of x without the values gone, made small, less near."""
    rest = x.size - gone.size
    before = _gone_before(x, gone, cut)
    until = _gone_before(x, gone, rest - 1 - cut)
    first, last = cut + before, rest - 1 - cut + until
    low, high = x[first], x[last]
    if math.isinf(low) or math.isinf(high):
        if low < 0.0 and high > 0.0 and math.isinf(low) and math.isinf(high):
            return math.nan
        return low if math.isinf(low) else high
    total, error = _two_sum(sums[last + 1], -sums[first])
    error += lost[last + 1] - lost[first]
    for j in range(before, until):
        total, more = _two_sum(total, -gone[j] * small)
        error += more
    kept = rest - 2 * cut
    total, more = _two_sum(total, -near * kept)
    total += error + more
    if winsorize:
        ends = low * small + high * small
        return (total + cut * (ends - 2.0 * near)) / rest
    return total / kept


@compiled
def _two_sum(a: float, b: float) -> tuple[float, float]:
    """The rounded sum and its exact error (Knuth 1969)."""
    total = a + b
    z = total - a
    return total, (a - (total - z)) + (b - z)


@compiled
def _gone_before(x: Values, gone: Values, rank: int) -> int:
    """How many of the values gone stand before the one that now has this rank, from 0.

    Of equal values the first ones go, so value j goes from a place of its own; without it and
    those before it the place is as many steps lower, which never falls as j rises.
    """
    low, high = 0, gone.size
    while low < high:
        j = (low + high) // 2
        place = first_not_below(x, gone[j]) + (j - first_not_below(gone, gone[j]))
        if place - j <= rank:
            low = j + 1
        else:
            high = j
    return low


def total_of(x: Values, small: float, out: Values) -> None:
    """Sum of the finite values, made small, and what rounding took from it."""
    sums, lost = running_sums(x, small)
    out[0], out[1] = sums[x.size], lost[x.size]
