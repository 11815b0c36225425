"""Location of values that carry weights."""

import math
from typing import Final

from midspread.udfs.arithmetic.order_statistics import midpoint
from midspread.udfs.arithmetic.running import add
from midspread.udfs.arithmetic.sums import compensated_sum
from midspread.udfs.declaring import NULL, Parameter, Values, aggregate, compiled

_ROUNDING: Final = 4 * 2.220446049250313e-16
"""Masses that differ by less than this part of the total are equal: 0.1 + 0.2 is 0.3."""


@aggregate(
    family="weighted",
    columns=("x", "w"),
    formula="the value with at most half of the total weight below it and at most half above; "
    "midway between two where the weight splits evenly",
    source="Edgeworth 1888, Philosophical Magazine 25, 184-191",
    breakdown="0.5 of the weight",
    cost="O(n log n) time, O(n) memory",
    smallest_n=1,
    example="weighted_median(dwell_s, boardings)",
)
def weighted_median(x: Values, w: Values) -> float:
    """Median of values that stand for unequal masses.

    Parameters
    ----------
    x : array
        Sorted values.
    w : array
        Their weights, 0 or more. They are masses: doubling all of them changes nothing.

    Returns
    -------
    float
        The weighted median; NULL where all weights are 0, NaN where a weight is infinite.

    Notes
    -----
    A value of weight 0 does not count, not even as one of the two middle values. The weight
    splits evenly where both halves agree but for rounding, so weights of 0.1, 0.2 and 0.3 do.
    """
    n = x.size
    total = compensated_sum(w, 0, n)
    if total == 0.0:
        return NULL
    if not math.isfinite(total):
        return math.nan
    room = _ROUNDING * total
    low = _first_reaching(w, total / 2 - room)
    high = low[0]
    reached, lost = low[1], low[2]
    while high + 1 < n and reached + lost <= total / 2 + room:
        high += 1
        reached, lost = add(reached, lost, w[high])
    return midpoint(x[low[0]], x[high])


@compiled
def _first_reaching(w: Values, mass: float) -> tuple[int, float, float]:
    """The first value of positive weight at which the weight from below reaches a mass.

    Returns its index and the weight reached, as the two parts of a running sum.
    """
    reached = lost = 0.0
    for i in range(w.size):
        reached, lost = add(reached, lost, w[i])
        if w[i] > 0.0 and reached + lost >= mass:
            return i, reached, lost
    return w.size - 1, reached, lost


@aggregate(
    family="weighted",
    columns=("x", "w"),
    parameters=(
        Parameter(
            "share",
            default=0.2,
            low=0.0,
            high=0.5,
            meaning="share of the total weight cut from each end",
        ),
    ),
    formula="weighted mean of what is left when share * (total weight) is cut from each end, the "
    "values at the cuts in part; share 0.5 is the weighted median",
    source="Andrews, Bickel, Hampel, Huber, Rogers & Tukey 1972, Robust Estimates of Location",
    breakdown="share, of the weight",
    cost="O(n log n) time, O(n) memory",
    smallest_n=1,
    example="weighted_trimmed_mean(dwell_s, boardings, 0.1)",
)
def weighted_trimmed_mean(x: Values, w: Values, share: float) -> float:
    """Weighted mean of the middle part of the weight.

    Parameters
    ----------
    x : array
        Sorted values.
    w : array
        Their weights, 0 or more, taken as masses.
    share : float
        Share of the total weight cut from each end, from 0 (the weighted mean) to 0.5 (the
        weighted median).

    Returns
    -------
    float
        The estimate; NULL where all weights are 0, NaN where a weight is infinite.

    Notes
    -----
    A value at a cut counts with the weight it has left. So at equal weights the result equals
    ``trimmed_mean``, which cuts whole values only, just where share * n is whole.

    References
    ----------
    Andrews, D. F., Bickel, P. J., Hampel, F. R., Huber, P. J., Rogers, W. H. and Tukey, J. W.
    (1972). Robust Estimates of Location: Survey and Advances. Princeton University Press.
    """
    n = x.size
    total = compensated_sum(w, 0, n)
    if total == 0.0:
        return NULL
    if not math.isfinite(total):
        return math.nan
    cut = share * total
    room = _ROUNDING * total
    if total - 2 * cut <= room:
        return weighted_median(x, w)

    first, first_left = _after_cut(w, cut, room, 0, 1)
    last, last_left = _after_cut(w, cut, room, n - 1, -1)
    if first >= last:
        return x[first]
    if math.isinf(x[first]) or math.isinf(x[last]):
        return x[first] + x[last]
    centre = x[(first + last) // 2]
    mass, mass_lost = add(first_left, 0.0, last_left)
    moment = first_left * (x[first] - centre)
    moment, moment_lost = add(moment, 0.0, last_left * (x[last] - centre))
    for i in range(first + 1, last):
        mass, mass_lost = add(mass, mass_lost, w[i])
        moment, moment_lost = add(moment, moment_lost, w[i] * (x[i] - centre))
    return centre + (moment + moment_lost) / (mass + mass_lost)


@compiled
def _after_cut(w: Values, cut: float, room: float, start: int, step: int) -> tuple[int, float]:
    """The first value that a cut leaves, walking from one end, and the weight it has left."""
    reached = lost = 0.0
    i = start
    while 0 <= i < w.size:
        reached, lost = add(reached, lost, w[i])
        left = (reached - cut) + lost
        if w[i] > 0.0 and left > room:
            return i, left
        i += step
    return i - step, 0.0
