"""Correlations of values that are pulled in, or count for less, far from the middle."""

import math
from typing import Final

import numpy as np

from midspread.udfs.arithmetic.order_statistics import distance
from midspread.udfs.arithmetic.points import median_in_place
from midspread.udfs.arithmetic.quickselect import put_in_place
from midspread.udfs.arithmetic.running import add
from midspread.udfs.association.rank_correlations import ratio_to_roots
from midspread.udfs.declaring import Parameter, Values, aggregate, compiled
from midspread.udfs.location.trimming import cut_from_each_tail

_BISQUARE_REACH: Final = 9.0


@aggregate(
    family="association",
    columns=("y", "x"),
    parameters=(
        Parameter(
            "share",
            "share of the values pulled in at each end",
            default=0.2,
            low=0.0,
            high=0.5,
            high_open=True,
        ),
    ),
    formula="Pearson's correlation after in each column the g lowest values become the (g+1)-th "
    "and the g highest the (n−g)-th, g = ⌊share · n⌋",
    source="Wilcox 2017, Introduction to Robust Estimation and Hypothesis Testing, 4th ed., "
    "Academic Press",
    breakdown="share, in each column by itself",
    cost="O(n log n) time, O(n) memory",
    smallest_n=2,
    example="winsorized_corr(dwell_s, boardings, 0.1)",
)
def winsorized_corr(y: Values, x: Values, share: float) -> float:
    """Linear correlation after the values in each tail are pulled in to the nearest kept value.

    Parameters
    ----------
    y, x : array of float
        Pairs sorted by y.
    share : float
        Share pulled in at each end, from 0 (Pearson's correlation) to below 0.5.

    Returns
    -------
    float
        From −1 to 1; NULL where the values kept of a column are all equal, NaN where one of them
        is infinite.

    Notes
    -----
    Each column is pulled in by itself, so a row that is wild only as a pair keeps its influence.
    Association is not cause.

    References
    ----------
    Wilcox, R. R. (2017). Introduction to Robust Estimation and Hypothesis Testing, 4th ed.
    """
    g = cut_from_each_tail(y.size, share)
    return _correlation_of(_winsorized(y, g), _winsorized(x, g))


@compiled
def _winsorized(v: Values, g: int) -> Values:
    """Values pulled in, less their mean, in units of half the range that is left."""
    n = v.size
    kept = v.copy()
    low = put_in_place(kept, g)
    high = put_in_place(kept, n - g - 1)
    if low == high:
        return np.zeros(n)
    middle, half = low / 2 + high / 2, high / 2 - low / 2
    if not math.isfinite(half):
        return np.full(n, math.nan)
    total = lost = 0.0
    for i in range(n):
        kept[i] = (min(max(v[i], low), high) - middle) / half
        total, lost = add(total, lost, kept[i])
    mean = (total + lost) / n
    for i in range(n):
        kept[i] -= mean
    return kept


@compiled
def _correlation_of(a: Values, b: Values) -> float:
    """Σ ab / √(Σ a² · Σ b²); NULL where a column is all 0."""
    both = both_lost = first = first_lost = second = second_lost = 0.0
    for i in range(a.size):
        both, both_lost = add(both, both_lost, a[i] * b[i])
        first, first_lost = add(first, first_lost, a[i] * a[i])
        second, second_lost = add(second, second_lost, b[i] * b[i])
    first, second = first + first_lost, second + second_lost
    if math.isnan(first) or math.isnan(second):
        return math.nan
    return ratio_to_roots(both + both_lost, first, second)


@aggregate(
    family="association",
    columns=("y", "x"),
    parameters=(
        Parameter(
            "share",
            "share of the values bent to the edge, Wilcox's β",
            default=0.2,
            low=0.0,
            high=0.5,
        ),
    ),
    formula="Σ ab / √(Σ a² · Σ b²), a and b the columns' values less φ, divided by ω and cut to "
    "−1 … 1; ω the ⌊(1 − share) n + 1/2⌋-th smallest distance from the median M; φ = (Σ of the "
    "values within M ± ω + ω (above − below)) / (n − above − below), the numbers of values outside",
    source="Wilcox 1994, Psychometrika 59, 601–616",
    breakdown="share, in each column by itself",
    cost="O(n log n) time, O(n) memory",
    smallest_n=2,
    example="percentage_bend_corr(dwell_s, boardings)",
)
def percentage_bend_corr(y: Values, x: Values, share: float) -> float:
    """Linear correlation after a share of the values in each column is bent to its edge.

    Parameters
    ----------
    y, x : array of float
        Pairs sorted by y.
    share : float
        Share of the values that are bent, 0 to 0.5.

    Returns
    -------
    float
        From −1 to 1; NULL where more than 1 − share of a column's values are equal, NaN where ω
        is infinite.

    Notes
    -----
    Each column is bent by itself, so a row that is wild only as a pair keeps its influence.
    Association is not cause.

    References
    ----------
    Wilcox, R. R. (1994). The percentage bend correlation coefficient. Psychometrika 59, 601–616.
    """
    return _correlation_of(_bent(y, share), _bent(x, share))


@compiled
def _bent(v: Values, share: float) -> Values:
    n = v.size
    centre = median_in_place(v.copy())
    distances = np.empty(n)
    for i in range(n):
        distances[i] = distance(v[i], centre)
    reach = put_in_place(distances, max(int(math.floor((1.0 - share) * n + 0.5)), 1) - 1)
    if reach == 0.0:
        return np.zeros(n)
    if not math.isfinite(reach) or math.isinf(centre):
        return np.full(n, math.nan)
    total = lost = 0.0
    below = above = 0
    for i in range(n):
        part = (v[i] - centre) / reach
        distances[i] = part
        if part < -1.0:
            below += 1
        elif part > 1.0:
            above += 1
        else:
            total, lost = add(total, lost, part)
    # Location in units of the reach, from the median
    middle = (total + lost + (above - below)) / (n - above - below)
    for i in range(n):
        distances[i] = min(max(distances[i] - middle, -1.0), 1.0)
    return distances


@aggregate(
    family="association",
    columns=("y", "x"),
    formula="Σ ab / √(Σ a² · Σ b²), a = u (1 − u²)² where abs(u) < 1 and 0 elsewhere, "
    "u = (y − M) / (9 · MAD), M the median, MAD not scaled; b likewise from x",
    source="Mosteller & Tukey 1977, Data Analysis and Regression; Wilcox 2017, Introduction to "
    "Robust Estimation and Hypothesis Testing, 4th ed.",
    breakdown="0.5, in each column by itself",
    cost="O(n log n) time, O(n) memory",
    smallest_n=2,
    example="bisquare_corr(dwell_s, boardings)",
)
def bisquare_corr(y: Values, x: Values) -> float:
    """Linear correlation of values that count the less the farther out they lie.

    Parameters
    ----------
    y, x : array of float
        Pairs sorted by y.

    Returns
    -------
    float
        From −1 to 1 (the biweight midcorrelation); NULL where the median absolute deviation of a
        column is 0, as when more than half of its values are equal, NaN where it is infinite.

    Notes
    -----
    Values past 9 median absolute deviations do not count. Each column is judged by itself, so a
    row that is wild only as a pair keeps its influence. Association is not cause.

    References
    ----------
    Mosteller, F. & Tukey, J. W. (1977). Data Analysis and Regression. Addison-Wesley.
    Wilcox, R. R. (2017). Introduction to Robust Estimation and Hypothesis Testing, 4th ed.
    """
    return _correlation_of(_bisquare_parts(y), _bisquare_parts(x))


@compiled
def _bisquare_parts(v: Values) -> Values:
    n = v.size
    centre = median_in_place(v.copy())
    parts = np.empty(n)
    for i in range(n):
        parts[i] = distance(v[i], centre)
    unit = median_in_place(parts)
    if unit == 0.0:
        return np.zeros(n)
    if not math.isfinite(unit) or math.isinf(centre):
        return np.full(n, math.nan)
    for i in range(n):
        u = (v[i] - centre) / unit / _BISQUARE_REACH
        rest = 1.0 - u * u
        parts[i] = u * (rest * rest) if abs(u) < 1.0 else 0.0
    return parts
