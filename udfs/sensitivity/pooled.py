"""Two samples pooled and re-expressed."""

import math
from typing import Final

import numpy as np
import numpy.typing as npt

from midspread.udfs.declaring import Values, compiled
from midspread.udfs.drivers import Indices

Labels = npt.NDArray[np.int8]
Windows = npt.NDArray[np.int64]
"""First and stop of what is kept of sorted values."""

_LARGEST_TO_SUBTRACT: Final = 4e307


@compiled
def pool(baseline: Values, other: Values, x: Values, labels: Labels) -> None:
    """Merge two sorted samples, NaN last; labels are 0 for the baseline and 1 for the other."""
    i = j = 0
    for place in range(x.size):
        from_baseline = j == other.size or (
            i < baseline.size and (baseline[i] <= other[j] or math.isnan(other[j]))
        )
        if from_baseline:
            x[place] = baseline[i]
            labels[place] = 0
            i += 1
        else:
            x[place] = other[j]
            labels[place] = 1
            j += 1


@compiled
def loses(x: Values, power: float) -> bool:
    """Whether a rung cannot take all of some sorted values."""
    return x[0] < 0.0 if power > 0.0 and power != 1.0 else power <= 0.0 and x[0] <= 0.0


@compiled
def re_express(x: Values, power: float, y: Values) -> float:
    """Fill y with rung(x, power) less that of a middle value, for power 1, 0.5 or 0.

    Differences of such values are those of the rungs, but keep their digits far from 0.

    Returns
    -------
    float
        The size that the rounding of the values has to be measured by, besides that of y.
    """
    n = x.size
    centre = x[n // 2]
    if power == 1.0:
        if math.isinf(centre) or largest_finite(x) > _LARGEST_TO_SUBTRACT:
            centre = 0.0
        for i in range(n):
            y[i] = x[i] - centre
        return abs(centre)
    if math.isinf(centre):
        centre = 1.0
    size = 1.0
    if power == 0.0:
        for i in range(n):
            away = (x[i] - centre) / centre
            near = -0.5 < away < 1.0
            y[i] = math.log1p(away) if near else math.log(x[i]) - math.log(centre)
    else:
        size = root = math.sqrt(centre)
        for i in range(n):
            if x[i] == centre:
                y[i] = 0.0
            else:
                y[i] = x[i] if math.isinf(x[i]) else (x[i] - centre) / (math.sqrt(x[i]) + root)
    for i in range(1, n):
        y[i] = max(y[i], y[i - 1])  # rounding must not turn the order of two close values
    return size


@compiled
def largest_finite(x: Values) -> float:
    """The largest absolute value of sorted values, infinities left aside; 0 for none."""
    low, high = 0, x.size - 1
    while low < high and math.isinf(x[low]):
        low += 1
    while high > low and math.isinf(x[high]):
        high -= 1
    return 0.0 if math.isinf(x[low]) else max(abs(x[low]), abs(x[high]))


@compiled
def split(y: Values, labels: Labels, label: int, own: Values, places: Indices) -> None:
    """Copy the values of one label, and where they stand among all; both keep their order."""
    written = 0
    for i in range(y.size):
        if labels[i] == label:
            own[written] = y[i]
            places[written] = i
            written += 1
