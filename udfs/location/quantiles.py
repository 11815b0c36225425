"""Quantiles: Harrell and Davis's, and the nine kinds of Hyndman and Fan."""

import math
from typing import Final

import numpy as np

from midspread.udfs.arithmetic.beta import beta_masses
from midspread.udfs.arithmetic.order_statistics import between
from midspread.udfs.arithmetic.running import add
from midspread.udfs.declaring import Parameter, Values, aggregate, compiled

_NEGLIGIBLE_SHAPE: Final = 1e-25
"""A beta parameter so small puts all mass at one end."""
_FUZZ: Final = 4 * 2.220446049250313e-16
"""Room for rounding in n · prob, as R's quantile leaves it for the kinds 4 to 9."""


@aggregate(
    family="location",
    parameters=(
        Parameter("prob", default=0.5, low=0.0, high=1.0, meaning="which quantile, 0.5 the median"),
    ),
    formula="sum of W_i x_(i), W_i the mass between (i-1)/n and i/n of the beta distribution with "
    "parameters (n+1) prob and (n+1) (1-prob)",
    source="Harrell & Davis 1982, Biometrika 69, 635-640",
    breakdown="0 in theory; in practice values whose weight is below 1e-20 of the largest do "
    "not count",
    cost="O(n log n) time, O(n) memory",
    smallest_n=1,
    example="harrell_davis(dwell_s, 0.9)",
)
def harrell_davis(x: Values, prob: float) -> float:
    """Quantile as a smooth average of the order statistics around it, weighted by a beta density.

    Parameters
    ----------
    x : array
        Sorted values.
    prob : float
        Which quantile, from 0 to 1; 0 and 1 give the smallest and the largest value, the limits
        of the definition.

    Returns
    -------
    float
        The estimate.

    Notes
    -----
    Steadier than a quantile of one or two order statistics, above all in small groups, but
    every value near the quantile counts: in a small group a wild value still leaves its mark.
    Values whose weight is below 1e-20 of the largest weight are left out, so that infinite
    values far from the quantile do no harm.

    References
    ----------
    Harrell, F. E. and Davis, C. E. (1982). A new distribution-free quantile estimator.
    Biometrika 69, 635-640.
    """
    n = x.size
    a = (n + 1) * prob
    b = (n + 1) * (1.0 - prob)
    if n == 1 or a < _NEGLIGIBLE_SHAPE:
        return x[0]
    if b < _NEGLIGIBLE_SHAPE:
        return x[n - 1]
    masses = np.empty(n)
    first, stop = beta_masses(a, b, masses)
    if math.isinf(x[first]) or math.isinf(x[stop - 1]):
        return x[first] + x[stop - 1]
    centre = x[(first + stop) // 2]
    total = total_lost = moment = moment_lost = 0.0
    for i in range(first, stop):
        total, total_lost = add(total, total_lost, masses[i])
        moment, moment_lost = add(moment, moment_lost, masses[i] * (x[i] - centre))
    return centre + (moment + moment_lost) / (total + total_lost)


@aggregate(
    family="location",
    parameters=(
        Parameter("prob", low=0.0, high=1.0, meaning="which quantile, 0.5 the median"),
        Parameter(
            "kind",
            default=7,
            low=1,
            high=9,
            whole=True,
            meaning="which of the nine definitions of Hyndman and Fan",
        ),
    ),
    formula="kinds 1-3 step: x_(ceil(n p)), its average with the next at a step, x_(nearest even "
    "to n p); kinds 4-9 interpolate at n p; n p + 1/2; (n+1) p; (n-1) p + 1; (n+1/3) p + 1/3; "
    "(n+1/4) p + 3/8",
    source="Hyndman & Fan 1996, The American Statistician 50, 361-365",
    breakdown="min(prob, 1 - prob)",
    cost="O(n log n) time, O(n) memory",
    smallest_n=1,
    example="quantile_hf(dwell_s, 0.9, kind := 8)",
)
def quantile_hf(x: Values, prob: float, kind: float) -> float:
    """Sample quantile by any of the nine definitions in use.

    Parameters
    ----------
    x : array
        Sorted values.
    prob : float
        Which quantile, from 0 to 1; 0 and 1 give the smallest and the largest value.
    kind : float
        1 to 9. 7 is what most software gives by default; 6 has mean rank prob; 8 is nearly
        median-unbiased whatever the distribution; 1 to 3 always step and 1 and 3 answer with
        an observed value.

    Returns
    -------
    float
        The quantile.

    Notes
    -----
    n · prob is taken in double and, for kinds 4 to 9, as whole within 4 units of rounding. The
    kinds 1 to 3 take it as it comes, as R 4.2 does, so 0.07 · 100, which is just above 7 in
    double, steps to the eighth value.

    References
    ----------
    Hyndman, R. J. and Fan, Y. (1996). Sample quantiles in statistical packages. The American
    Statistician 50, 361-365.
    """
    low, high, part = quantile_place(x.size, prob, kind)
    if part == 0.0:
        return x[low]
    if part == 1.0:
        return x[high]
    return between(x[low], x[high], part)


@compiled
def quantile_place(n: int, prob: float, kind: float) -> tuple[int, int, float]:
    """Which two of n sorted values a quantile lies between, from 0, and how far from the first."""
    which = int(kind)
    if which == 7:
        position = (n - 1) * prob
        below = math.floor(position)
        low = int(below)
        return (low, low, 0.0) if low + 1 >= n else (low, low + 1, position - below)
    if which <= 3:
        position = n * prob - 0.5 if which == 3 else n * prob
        below = math.floor(position)
        if which == 1:
            part = 1.0 if position > below else 0.0
        elif which == 2:
            part = 1.0 if position > below else 0.5
        else:
            part = 0.0 if position == below and below % 2 == 0 else 1.0
    else:
        start, stretch = _plotting_position(n, which)
        position = start + prob * stretch
        below = math.floor(position + _FUZZ)
        part = position - below
        if abs(part) < _FUZZ:
            part = 0.0
    return min(max(int(below) - 1, 0), n - 1), min(max(int(below), 0), n - 1), part


@compiled
def _plotting_position(n: int, kind: int) -> tuple[float, float]:
    """Start and stretch of the position (from 1) as a line in prob: a and n + 1 − a − b."""
    if kind == 4:
        return 0.0, float(n)
    if kind == 5:
        return 0.5, float(n)
    if kind == 6:
        return 0.0, n + 1.0
    if kind == 8:
        return 1 / 3, n + 1 - 1 / 3 - 1 / 3
    return 3 / 8, n + 1 - 3 / 8 - 3 / 8
