"""The shape of one group's values on every rung of the ladder of powers."""

import math
from typing import Final

import numpy as np

from midspread.udfs.arithmetic.normal import lower_normal_quantile
from midspread.udfs.arithmetic.order_statistics import median_of_sorted, median_sorted
from midspread.udfs.arithmetic.sums import compensated_mean
from midspread.udfs.declaring import Values, compiled
from midspread.udfs.drivers import STOP, Indices
from midspread.udfs.shape.medcouple import medcouple
from midspread.udfs.shape.skewness import quantile_skew

FIGURES: Final = ("n", "n_lost", "skewness", "bowley_skew", "medcouple", "normal_plot_corr")
"""What `ladder_figures` writes for each power."""

_WIDTH: Final = len(FIGURES)
_BLOCK: Final = 64


@compiled
def ladder_figures(x: Values, powers: Values, out: Values, control: Indices) -> None:
    """Fill FIGURES for each power in turn, from sorted values, NaN last.

    Figures that have no value (all values equal) stay NULL.
    """
    n = x.size
    nan_found = math.isnan(x[n - 1])
    below = int(np.searchsorted(x, 0.0))
    not_above = int(np.searchsorted(x, 0.0, side="right"))
    room = np.empty(n)
    scores = np.empty(n // 2)
    scored = 0
    for place in range(powers.size):
        if control[STOP] != 0:
            return
        power = powers[place]
        lost = 0 if power == 1.0 else (below if power > 0.0 else not_above)
        figures = out[place * _WIDTH : (place + 1) * _WIDTH]
        figures[0] = n - lost
        figures[1] = lost
        if nan_found:
            figures[2:] = math.nan
            continue
        if lost == n:
            continue
        y = room[lost:]
        re_express(x[lost:], power, y)
        if y[0] == y[y.size - 1]:
            continue
        if y.size != scored:
            scored = y.size
            plotting_scores(scored, scores)
        figures[3] = quantile_skew(y, 0.25)
        figures[4] = medcouple(y)
        _moments(y, scores, figures)


@compiled
def re_express(x: Values, power: float, y: Values) -> None:
    """Fill y with sorted values on a rung, but for origin and unit; x fits the rung.

    It is box_cox(x / m, power) with m from the middle of the values, written in d = x / m − 1 so
    that values close together, far from 0, keep the digits of their differences.
    """
    n = x.size
    centre = median_sorted(x)
    if power == 1.0:
        for i in range(n):
            y[i] = x[i] if math.isinf(x[i]) or math.isinf(centre) else x[i] - centre
        return
    if centre == 0.0 or math.isinf(centre):
        # From 0 up: some value above 0, if there is one; infinite values are put in below.
        centre = _first_positive(x)
    finite = n
    while finite > 0 and math.isinf((x[finite - 1] - centre) / centre):
        finite -= 1
    if power == 0.0:
        for i in range(finite):
            y[i] = math.log1p((x[i] - centre) / centre)
    elif power == 0.5:
        for i in range(finite):
            d = (x[i] - centre) / centre
            y[i] = 2.0 * d / (1.0 + math.sqrt(1.0 + d))
    elif power == 2.0:
        for i in range(finite):
            d = (x[i] - centre) / centre
            y[i] = d * (1.0 + 0.5 * d)
    elif power == 3.0:
        for i in range(finite):
            d = (x[i] - centre) / centre
            y[i] = d * (1.0 + d * (1.0 + d / 3.0))
    elif power == -0.5:
        for i in range(finite):
            d = (x[i] - centre) / centre
            root = math.sqrt(1.0 + d)
            y[i] = 2.0 * (d / (1.0 + root)) / root
    elif power == -1.0:
        for i in range(finite):
            d = (x[i] - centre) / centre
            y[i] = d / (1.0 + d)
    elif power == -2.0:
        for i in range(finite):
            d = (x[i] - centre) / centre
            share = d / (1.0 + d)
            y[i] = share * (1.0 - 0.5 * share)
    else:
        for i in range(finite):
            y[i] = math.expm1(power * math.log1p((x[i] - centre) / centre)) / power
    for i in range(finite, n):
        y[i] = math.inf if power >= 0.0 else -1.0 / power
    for i in range(1, n):
        y[i] = max(y[i], y[i - 1])  # rounding must not turn the order of two close values


@compiled
def _first_positive(x: Values) -> float:
    """The middle one of the values that are above 0 and finite; 1 where there is none."""
    start = 0
    while start < x.size and x[start] <= 0.0:
        start += 1
    stop = x.size
    while stop > start and math.isinf(x[stop - 1]):
        stop -= 1
    return median_of_sorted(x, start, stop) if stop > start else 1.0


@compiled
def plotting_scores(n: int, scores: Values) -> None:
    """Fill the first n // 2 with Φ⁻¹ of the medians of the largest uniform order statistics.

    Filliben's: 0.5^(1/n) for the largest, (i − 0.3175) / (n + 0.365) for the others; the largest
    comes first, and the smallest values have the same with a minus sign.
    """
    for i in range(n // 2):
        p = -math.expm1(math.log(0.5) / n) if i == 0 else (i + 0.6825) / (n + 0.365)
        scores[i] = -lower_normal_quantile(p)


@compiled
def _moments(y: Values, scores: Values, figures: Values) -> None:
    """Skewness and the correlation of the normal probability plot."""
    n = y.size
    if math.isinf(y[0]) or math.isinf(y[n - 1]):
        figures[2] = math.nan
        figures[5] = math.nan
        return
    # In units of the widest deviation, so that no power of it is too large or too small.
    mean = compensated_mean(y, 0, n)
    unit = max(y[n - 1] - mean, mean - y[0])
    scale = 1.0 / unit
    if math.isinf(unit) or math.isinf(scale):
        figures[2] = math.nan
        figures[5] = math.nan
        return
    second = third = product = squares = 0.0
    for first in range(0, n, _BLOCK):
        second_part = third_part = 0.0
        for i in range(first, min(first + _BLOCK, n)):
            v = (y[i] - mean) * scale
            second_part += v * v
            third_part += v * v * v
        second += second_part
        third += third_part
    for first in range(0, n // 2, _BLOCK):
        product_part = squares_part = 0.0
        for i in range(first, min(first + _BLOCK, n // 2)):
            product_part += scores[i] * ((y[n - 1 - i] - y[i]) * scale)
            squares_part += scores[i] * scores[i]
        product += product_part
        squares += squares_part
    figures[2] = third / n / (second / n) ** 1.5
    figures[5] = min(product / math.sqrt(2.0 * squares * second), 1.0)
