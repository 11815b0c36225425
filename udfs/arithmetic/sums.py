"""Sums whose digits hold: compensated, over a slice of sorted values."""

import math
from typing import Final

from midspread.udfs.declaring import Values, compiled

_BLOCK: Final = 64
_SMALL_UNIT: Final = 2.0**-64


@compiled
def compensated_sum(x: Values, start: int, stop: int) -> float:
    """Sum of x[start:stop] by Neumaier's compensated summation (Neumaier 1974).

    Infinite values give what plain addition gives: ±Inf, or NaN where both signs meet.
    """
    return compensated_sum_from(x, start, stop, 0.0)


@compiled
def compensated_sum_from(x: Values, start: int, stop: int, origin: float) -> float:
    """Sum of x[i] − origin over start ≤ i < stop, compensated.

    Four independent partial sums let the processor work on them side by side; they are joined
    in a fixed order, so the same values give the same bits.
    """
    s0 = s1 = s2 = s3 = 0.0
    c0 = c1 = c2 = c3 = 0.0
    i = start
    while i + 4 <= stop:
        v = x[i] - origin
        t = s0 + v
        b = t - s0
        c0 += (s0 - (t - b)) + (v - b)
        s0 = t
        v = x[i + 1] - origin
        t = s1 + v
        b = t - s1
        c1 += (s1 - (t - b)) + (v - b)
        s1 = t
        v = x[i + 2] - origin
        t = s2 + v
        b = t - s2
        c2 += (s2 - (t - b)) + (v - b)
        s2 = t
        v = x[i + 3] - origin
        t = s3 + v
        b = t - s3
        c3 += (s3 - (t - b)) + (v - b)
        s3 = t
        i += 4
    while i < stop:
        v = x[i] - origin
        t = s0 + v
        b = t - s0
        c0 += (s0 - (t - b)) + (v - b)
        s0 = t
        i += 1
    a, ea = _two_sum(s0, s1)
    d, ed = _two_sum(s2, s3)
    total, et = _two_sum(a, d)
    correction = ((c0 + c1) + (c2 + c3)) + (ea + ed + et)
    result = total + correction
    if math.isnan(result):  # inf − inf inside the correction: plain addition decides
        result = (s0 + s1) + (s2 + s3)
    return result


@compiled
def _two_sum(a: float, b: float) -> tuple[float, float]:
    """The rounded sum and its exact error (Knuth 1969)."""
    t = a + b
    z = t - a
    return t, (a - (t - z)) + (b - z)


@compiled
def compensated_mean(x: Values, start: int, stop: int) -> float:
    """Mean of x[start:stop]; undefined for an empty slice, which the callers exclude."""
    return mean_with_tails(x, start, stop, 0)


@compiled
def mean_with_tails(x: Values, start: int, stop: int, more: int) -> float:
    """Mean of x[start:stop] when its first and its last value count so many times more.

    Values within a factor of 2 of the middle one are added as differences from it, which are
    exact: a common shift costs no digits, and equal values have themselves as their mean.
    """
    low, middle, high = x[start], x[(start + stop) // 2], x[stop - 1]
    near = (middle / 2 <= low and high / 2 <= middle) or (middle <= low / 2 and high <= middle / 2)
    origin = middle if near and not math.isinf(middle) else 0.0
    total = compensated_sum_from(x, start, stop, origin)
    if more > 0:
        total += more * ((low - origin) + (high - origin))
    mean = origin + total / (stop - start + 2 * more)
    if not math.isfinite(mean) and math.isfinite(low) and math.isfinite(high):
        mean = _mean_of_huge(x, start, stop, more)
    # The last rounding must not carry the mean past the values.
    return low if mean < low else high if mean > high else mean


@compiled
def _mean_of_huge(x: Values, start: int, stop: int, more: int) -> float:
    """The mean of values whose sum is too large for a double."""
    total = lost = 0.0
    for i in range(start, stop):
        total, error = _two_sum(total, x[i] * _SMALL_UNIT)
        lost += error
    total += more * (x[start] * _SMALL_UNIT + x[stop - 1] * _SMALL_UNIT)
    return (total + lost) / (stop - start + 2 * more) / _SMALL_UNIT


@compiled
def squares_from(
    x: Values, start: int, stop: int, origin: float, shift: float
) -> tuple[float, float]:
    """Σ v² and Σ v of v = (x[i] − origin) − shift over start ≤ i < stop.

    Squares are added plainly within a block, two sums side by side; blocks join a compensated
    total. The plain Σ v is meant as a small correction.
    """
    total = lost = deviation = 0.0
    first = start
    while first < stop:
        end = min(first + _BLOCK, stop)
        s0 = s1 = d0 = d1 = 0.0
        i = first
        while i + 2 <= end:
            v = (x[i] - origin) - shift
            s0 += v * v
            d0 += v
            v = (x[i + 1] - origin) - shift
            s1 += v * v
            d1 += v
            i += 2
        if i < end:
            v = (x[i] - origin) - shift
            s0 += v * v
            d0 += v
        total, error = _two_sum(total, s0 + s1)
        lost += error
        deviation += d0 + d1
        first = end
    if math.isnan(lost):  # squares too large for a double: the total is infinite, or NaN itself
        return total, deviation
    return total + lost, deviation


@compiled
def winsorized_sum_of_squares(x: Values, g: int) -> float:
    """Σ (w_i − mean(w))² where w is x with the g lowest and g highest values pulled in."""
    n = x.size
    low, high = x[g], x[n - g - 1]
    if low == high:
        return 0.0
    if math.isinf(low) or math.isinf(high):
        return math.nan
    # Deviations are taken from a value inside the data, then corrected for the mean.
    centre = compensated_mean(x, g, n - g)
    middle = compensated_sum_from(x, g, n - g, centre)
    below, above = low - centre, high - centre
    shift = (middle + g * (below + above)) / n
    squares, _ = squares_from(x, g, n - g, centre, shift)
    return squares + g * ((below - shift) * (below - shift) + (above - shift) * (above - shift))
