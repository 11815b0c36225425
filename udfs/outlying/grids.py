"""The rounding grid of one group's values, and which last digits they prefer."""

import math
from typing import Final

import numpy as np

from midspread.udfs.arithmetic.order_statistics import (
    NORMAL_QUARTILE,
    median_absolute_deviation,
    median_sorted,
)
from midspread.udfs.declaring import Values, compiled

HEAPING_FIELDS: Final = (
    "step",
    "on_step",
    "unit",
    "ends_in_0",
    "ends_in_5",
    "whipple",
    "digit_dissimilarity",
    "n_distinct",
    "tied",
    "most_frequent_share",
    "quantile_error",
    "mad_scale",
    "error_in_scales",
)
"""What `heaping_figures` writes, in this order."""

SMALLEST_N: Final = 10
"""Fewer values lie on a coarse grid by chance too often."""

EXPLAINED: Final = 0.9
"""The share of the values that a step must explain."""

_DIGITS: Final = 15  # decimal digits that a double tells apart
_SMALLEST_POWER: Final = -22  # 10^22 is the largest power of ten that a double holds exactly
_LARGEST_POWER: Final = 300
_POWERS: Final = np.array([float(f"1e{i}") for i in range(_LARGEST_POWER + 1)])
# Largest first within a decade: 5, 2.5, 2 and 1, as whole numbers times a power of ten.
_FACTORS: Final = np.array([5.0, 25.0, 2.0, 1.0])
_SHIFTS: Final = np.array([0, -1, 0, 0])


@compiled
def multiples_of(x: float, factor: float, power: int) -> float:
    """How many times factor · 10^power goes into x, NaN when it does not go evenly.

    Exact in decimals: the product and the power of ten are whole numbers that a double holds, so
    the one division rounds as reading the decimal number does. 0.3 is three times 0.1.
    """
    if power >= 0:
        step = factor * _POWERS[power]
        count = np.rint(x / step)
        return count if count * step == x else math.nan
    count = np.rint(x * _POWERS[-power] / factor)
    return count if count * factor / _POWERS[-power] == x else math.nan


@compiled
def find_step(x: Values, most_frequent: float) -> tuple[float, int]:
    """The coarsest step, as a factor and a power of ten, that explains the values; factor 0: none.

    Zeros lie on any grid and the most frequent value may be there for reasons of its own: the
    others decide, and the most frequent one must lie on the step too. x is sorted, without NaN.
    """
    n_infinite, n_zero, n_frequent = 0, 0, 0
    largest = 0.0
    for i in range(x.size):
        if math.isinf(x[i]):
            n_infinite += 1
        else:
            largest = max(largest, abs(x[i]))
            if x[i] == 0.0:
                n_zero += 1
            elif x[i] == most_frequent:
                n_frequent += 1
    judged = x.size - n_infinite - n_zero - n_frequent
    if judged == 0 and n_zero > 0:
        judged = n_frequent
        most_frequent = 0.0
    if judged == 0 or math.isinf(most_frequent):
        return 0.0, 0
    allowed = math.floor((1.0 - EXPLAINED) * judged + 1e-9)
    top = min(int(math.floor(math.log10(largest))) + 1, _LARGEST_POWER)
    for power in range(top, max(top - 1 - _DIGITS, _SMALLEST_POWER), -1):
        for choice in range(_FACTORS.size):
            factor, at = _FACTORS[choice], power + _SHIFTS[choice]
            if at < _SMALLEST_POWER or math.isnan(multiples_of(most_frequent, factor, at)):
                continue
            misses = 0
            for i in range(x.size):
                if x[i] == 0.0 or x[i] == most_frequent or math.isinf(x[i]):
                    continue
                if math.isnan(multiples_of(x[i], factor, at)):
                    misses += 1
                    if misses > allowed:
                        break
            if misses <= allowed:
                return factor, at
    return 0.0, 0


@compiled
def step_size(factor: float, power: int) -> float:
    """factor · 10^power, as reading the decimal number gives it."""
    return factor * _POWERS[power] if power >= 0 else factor / _POWERS[-power]


@compiled
def runs_of(x: Values) -> tuple[int, int, int, float]:
    """Distinct values, values that occur more than once, the most frequent one's count and it."""
    distinct, tied, most = 0, 0, 0
    most_frequent = math.nan
    i = 0
    while i < x.size:
        end = i + 1
        while end < x.size and x[end] == x[i]:
            end += 1
        distinct += 1
        if end - i > 1:
            tied += end - i
        if end - i > most:
            most, most_frequent = end - i, x[i]
        i = end
    return distinct, tied, most, most_frequent


@compiled
def step_of_group(x: Values, _settings: Values, out: Values) -> None:
    """The step alone, from sorted values with NaN last; NaN are left out."""
    n = x.size
    while n > 0 and math.isnan(x[n - 1]):
        n -= 1
    if n < SMALLEST_N:
        return
    distinct, _, _, most_frequent = runs_of(x[:n])
    if distinct > 1:
        factor, power = find_step(x[:n], most_frequent)
        if factor > 0.0:
            out[0] = step_size(factor, power)


@compiled
def heaping_figures(x: Values, out: Values) -> None:
    """Fill HEAPING_FIELDS from sorted values, NaN last."""
    n = x.size
    if math.isnan(x[n - 1]):
        out[: len(HEAPING_FIELDS)] = math.nan
        return
    distinct, tied, most, most_frequent = runs_of(x)
    out[7] = distinct
    out[8] = tied / n
    out[9] = most / n
    scale = median_absolute_deviation(x, median_sorted(x)) / NORMAL_QUARTILE
    out[11] = scale
    if n < SMALLEST_N or distinct == 1:
        return
    factor, power = find_step(x, most_frequent)
    if factor == 0.0:
        return
    step = step_size(factor, power)
    on_step = 0
    digits = np.zeros(10)
    for i in range(n):
        if math.isinf(x[i]):
            continue
        if not math.isnan(multiples_of(x[i], factor, power)):
            on_step += 1
        if x[i] != 0.0:
            # The power of ten in the step is the unit in which its multiples are written.
            count = abs(multiples_of(x[i], 1.0, power))
            if not math.isnan(count):
                digits[int(count % 10.0)] += 1.0
    written = digits.sum()
    apart = 0.0
    for digit in range(10):
        apart += abs(digits[digit] / written - 0.1)
    out[0] = step
    out[1] = on_step / n
    out[2] = step_size(1.0, power)
    out[3] = digits[0] / written
    out[4] = digits[5] / written
    out[5] = 500.0 * (digits[0] + digits[5]) / written
    out[6] = 50.0 * apart
    out[10] = step / 2.0
    if scale > 0.0:
        out[12] = step / 2.0 / scale
