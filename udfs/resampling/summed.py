"""The sum of very many draws, drawn as one number.

The sum of m independent draws from some values is all but normal once m is large and no value
stands far out. It is drawn as a normal number corrected for the third cumulant (Cornish & Fisher
1938), where the fourth and higher ones move no quantile between 1 % and 99 % by more than a few
thousandths of the sum's standard deviation.
"""

import math
from typing import Final

import numpy as np

from midspread.udfs.declaring import Values, compiled
from midspread.udfs.resampling.variates import next_normal

_FAR: Final = 0.005
"""No value may lie further from the mean than √(this · m) standard deviations."""


@compiled
def set_power_sums(v: Values, unit: float, sums: Values) -> None:
    """Fill sums[k, i] with the sum of (v / unit)^(k + 1) from the middle value to value i.

    Sums run from the middle outwards, so that wild values in a tail spoil none that leaves them
    out; to the left of the middle they are counted negative.
    """
    n = v.size
    middle = n // 2
    for upwards in range(2):
        first = second = third = 0.0
        if upwards == 1:
            sums[:, middle] = 0.0
        for step in range(n - middle if upwards == 1 else middle):
            i = middle + step if upwards == 1 else middle - 1 - step
            u = v[i] / unit
            first += u
            second += u * u
            third += u * u * u
            if upwards == 1:
                sums[0, i + 1], sums[1, i + 1], sums[2, i + 1] = first, second, third
            else:
                sums[0, i], sums[1, i], sums[2, i] = -first, -second, -third


@compiled
def summed_draws(
    state: np.uint64, sums: Values, unit: float, v: Values, start: int, stop: int, draws: int
) -> tuple[float, np.uint64]:
    """The sum of so many draws from v[start:stop], ascending; NaN where they must be drawn singly.

    Parameters
    ----------
    sums : ndarray of float64
        See `set_power_sums`; none (no columns) asks for single draws.
    unit : float
        What v was divided by there.
    """
    if sums.shape[1] == 0:
        return math.nan, state
    size = stop - start
    mean = (sums[0, stop] - sums[0, start]) / size
    square = (sums[1, stop] - sums[1, start]) / size
    variance = square - mean * mean
    reach = max(v[stop - 1] / unit - mean, mean - v[start] / unit)
    if not reach * reach <= _FAR * variance * draws:  # nor where something is NaN
        return math.nan, state
    cube = (sums[2, stop] - sums[2, start]) / size - 3.0 * mean * square + 2.0 * mean**3
    z, state = next_normal(state)
    spread = math.sqrt(variance * draws)
    z += cube / (variance * spread) * (z * z - 1.0) / 6.0
    return (draws * mean + spread * z) * unit, state
