"""M-estimates of location: Huber's and the bisquare."""

import math
from typing import Final

import numpy as np

from midspread.udfs.arithmetic.order_statistics import (
    NORMAL_QUARTILE,
    median_absolute_deviation,
    median_sorted,
)
from midspread.udfs.arithmetic.running import add
from midspread.udfs.arithmetic.sums import compensated_mean, compensated_sum_from
from midspread.udfs.arithmetic.windows import first_above, first_from
from midspread.udfs.declaring import NULL, Parameter, Values, aggregate, compiled

_STEP: Final = 1e-12
"""Iterations end when a step is shorter than this part of the scale."""
_MOST_NEWTON_STEPS: Final = 30
_MOST_STEPS: Final = 200
_MOST_REWEIGHTINGS: Final = 500
_BLOCK: Final = 256
"""So many terms are added plainly before the sum joins a compensated total."""


@aggregate(
    family="location",
    parameters=(
        Parameter(
            "k",
            default=1.345,
            low=0.0,
            low_open=True,
            meaning="how many scales from the centre a value's pull stops growing",
        ),
    ),
    formula="the m where sum of psi((x - m) / mad_scale(x)) = 0, psi(u) = max(-k, min(k, u)); "
    "the median where mad_scale is 0",
    source="Huber 1964, Annals of Mathematical Statistics 35, 73-101; "
    "k: Holland & Welsch 1977, Communications in Statistics A 6, 813-827",
    breakdown="0.5",
    cost="O(n log n) time, O(n) memory",
    smallest_n=1,
    example="huber_location(dwell_s)",
)
def huber_location(x: Values, k: float) -> float:
    """Location by Huber's M-estimate: a mean in which far values pull no harder than near ones.

    Parameters
    ----------
    x : array
        Sorted values.
    k : float
        Where Huber's psi bends, in units of ``mad_scale``: any number above 0. Small is close
        to the median, large is close to the mean; 1.345 keeps 95 % of the mean's efficiency on
        normal data.

    Returns
    -------
    float
        The estimate, to within 1e-12 of the scale.

    Notes
    -----
    The scale is held at ``mad_scale``; it is not estimated along with the location. Where more
    than half of the values are equal it is 0 and the answer is the median. An infinite value
    pulls as any far value does. For ``k`` below 0.6745 the equation can hold on a whole
    interval; the answer is then a point of it, the median where that belongs to it.

    References
    ----------
    Huber, P. J. (1964). Robust estimation of a location parameter. Annals of Mathematical
    Statistics 35, 73-101.
    """
    n = x.size
    centre = median_sorted(x)
    scale = median_absolute_deviation(x, centre) / NORMAL_QUARTILE
    if scale == 0.0 or not math.isfinite(centre):
        return centre
    reach = k * scale
    if not math.isfinite(reach):
        return compensated_mean(x, 0, n)

    # The pull is a decreasing, piecewise linear function of the offset from the median: a
    # Newton step is exact once it leaves the values within reach as they are. A bracket and
    # bisection catch the steps that do not settle.
    offset = 0.0
    low = first_from(x, centre, -reach)
    high = first_above(x, centre, reach)
    total = compensated_sum_from(x, low, high, centre)
    left, right = -reach, reach
    for step in range(_MOST_STEPS):
        inside = high - low
        outer = reach * ((n - high) - low)
        pull = (total - inside * offset) + outer
        if pull == 0.0 or right - left <= _STEP * scale:
            break
        if pull > 0.0:
            left = offset
        else:
            right = offset
        target = (left + right) / 2
        newton_step = inside > 0 and step < _MOST_NEWTON_STEPS
        if newton_step:
            newton = (total + outer) / inside
            if abs(newton - offset) <= _STEP * scale:
                offset = newton
                break
            newton_step = left < newton < right
            if newton_step:
                target = newton
        offset = target
        new_low, new_high, change = _moved_window(x, centre, low, high, offset, reach)
        if newton_step and new_low == low and new_high == high:
            break
        low, high = new_low, new_high
        total += change
    return centre + offset


@compiled
def _moved_window(
    x: Values, centre: float, low: int, high: int, offset: float, reach: float
) -> tuple[int, int, float]:
    """The window of values within reach of an offset, found by walking from an earlier one.

    Returns its ends and the change in the sum of value − centre over it.
    """
    n = x.size
    total = lost = 0.0
    while low < n and x[low] - centre < offset - reach:
        total, lost = add(total, lost, centre - x[low])
        low += 1
    while low > 0 and x[low - 1] - centre >= offset - reach:
        low -= 1
        total, lost = add(total, lost, x[low] - centre)
    while high < n and x[high] - centre <= offset + reach:
        total, lost = add(total, lost, x[high] - centre)
        high += 1
    while high > 0 and x[high - 1] - centre > offset + reach:
        high -= 1
        total, lost = add(total, lost, centre - x[high])
    return low, high, total + lost


@aggregate(
    family="location",
    parameters=(
        Parameter(
            "c",
            default=4.685,
            low=0.0,
            low_open=True,
            meaning="how many scales from the centre a value stops counting",
        ),
    ),
    formula="the m where sum of psi((x - m) / mad_scale(x)) = 0, psi(u) = u (1 - (u/c)^2)^2 "
    "within c and 0 beyond; the median where mad_scale is 0",
    source="Beaton & Tukey 1974, Technometrics 16, 147-185; "
    "c: Holland & Welsch 1977, Communications in Statistics A 6, 813-827",
    breakdown="0.5",
    cost="O(n log n) time, O(n) memory",
    smallest_n=1,
    example="bisquare_location(dwell_s)",
)
def bisquare_location(x: Values, c: float) -> float:
    """Location by the bisquare M-estimate: values count less the farther out, past c not at all.

    Parameters
    ----------
    x : array
        Sorted values.
    c : float
        Where the weight reaches 0, in units of ``mad_scale``: any number above 0. 4.685 keeps
        95 % of the mean's efficiency on normal data.

    Returns
    -------
    float
        The estimate; NULL where no value lies within ``c`` scales, which needs ``c`` below
        0.6745.

    Notes
    -----
    The equation can have several solutions; this is the one that weighted means reach from the
    median, each with the weights (1 - u^2)^2 of the one before, until a step is below 1e-12 of
    the scale (after 500 steps the last is taken). The scale is held at ``mad_scale``; where more
    than half of the values are equal it is 0 and the answer is the median. Infinite values lie
    past c and do no harm.

    References
    ----------
    Beaton, A. E. and Tukey, J. W. (1974). The fitting of power series, meaning polynomials,
    illustrated on band-spectroscopic data. Technometrics 16, 147-185.
    """
    n = x.size
    centre = median_sorted(x)
    scale = median_absolute_deviation(x, centre) / NORMAL_QUARTILE
    if scale == 0.0 or not math.isfinite(centre):
        return centre
    unit = c * scale
    if not math.isfinite(unit):
        return compensated_mean(x, 0, n)

    # With y = (x − median)/unit both sums of a step are polynomials in the offset, so the sums
    # of powers of y over the window serve every step; only values that cross its ends are added
    # or taken out.
    low = first_above(x, centre, -unit)
    high = first_from(x, centre, unit)
    powers = np.zeros(6)
    _add_powers(powers, x, low, high, centre, unit, 1.0)
    offset = 0.0
    for _ in range(_MOST_REWEIGHTINGS):
        pull, weight = _pull_and_weight(powers, offset)
        if not weight > 0.0:
            return NULL
        step = pull / weight
        offset += step
        if abs(step) * c <= _STEP:
            break
        new_low = low
        while new_low < n and (x[new_low] - centre) / unit <= offset - 1.0:
            new_low += 1
        while new_low > 0 and (x[new_low - 1] - centre) / unit > offset - 1.0:
            new_low -= 1
        new_high = high
        while new_high < n and (x[new_high] - centre) / unit < offset + 1.0:
            new_high += 1
        while new_high > 0 and (x[new_high - 1] - centre) / unit >= offset + 1.0:
            new_high -= 1
        if new_low != low or new_high != high:
            _add_powers(powers, x, new_low, low, centre, unit, 1.0)
            _add_powers(powers, x, low, new_low, centre, unit, -1.0)
            _add_powers(powers, x, high, new_high, centre, unit, 1.0)
            _add_powers(powers, x, new_high, high, centre, unit, -1.0)
            low, high = new_low, new_high
    return centre + offset * unit


@compiled
def _add_powers(
    powers: Values, x: Values, start: int, stop: int, centre: float, unit: float, sign: float
) -> None:
    """Add the sums of y^0 … y^5, y = (x − centre)/unit, over x[start:stop], times the sign."""
    if start >= stop:
        return
    lost1 = lost2 = lost3 = lost4 = lost5 = 0.0
    total1, total2, total3, total4, total5 = powers[1], powers[2], powers[3], powers[4], powers[5]
    for first in range(start, stop, _BLOCK):
        s1 = s2 = s3 = s4 = s5 = 0.0
        for i in range(first, min(first + _BLOCK, stop)):
            y = (x[i] - centre) / unit
            square = y * y
            s1 += y
            s2 += square
            s3 += y * square
            s4 += square * square
            s5 += y * (square * square)
        total1, lost1 = add(total1, lost1, sign * s1)
        total2, lost2 = add(total2, lost2, sign * s2)
        total3, lost3 = add(total3, lost3, sign * s3)
        total4, lost4 = add(total4, lost4, sign * s4)
        total5, lost5 = add(total5, lost5, sign * s5)
    powers[0] += sign * (stop - start)
    powers[1] = total1 + lost1
    powers[2] = total2 + lost2
    powers[3] = total3 + lost3
    powers[4] = total4 + lost4
    powers[5] = total5 + lost5


@compiled
def _pull_and_weight(powers: Values, offset: float) -> tuple[float, float]:
    """Sums of v (1 − v²)² and of (1 − v²)² over v = y − offset, from the sums of powers of y."""
    m = -offset
    s0, s1, s2, s3, s4, s5 = powers[0], powers[1], powers[2], powers[3], powers[4], powers[5]
    # Binomial expansion of the sums of v, v², … v⁵.
    v1 = s1 + m * s0
    v2 = s2 + m * (2 * s1 + m * s0)
    v3 = s3 + m * (3 * s2 + m * (3 * s1 + m * s0))
    v4 = s4 + m * (4 * s3 + m * (6 * s2 + m * (4 * s1 + m * s0)))
    v5 = s5 + m * (5 * s4 + m * (10 * s3 + m * (10 * s2 + m * (5 * s1 + m * s0))))
    return v1 - 2 * v3 + v5, s0 - 2 * v2 + v4
