"""The power that makes the middles of the letter values line up."""

import math
from typing import Final

import numpy as np

from midspread.udfs.arithmetic.order_statistics import at_depth, median_sorted
from midspread.udfs.arithmetic.quickselect import sort_short
from midspread.udfs.declaring import NULL, Values, aggregate

_LETTERS: Final = 5  # F, E, D, C, B: beyond 1/64 in each tail stand the wild values


@aggregate(
    family="re-expression",
    formula=(
        "1 − median over the letters F, E, D, C, B of "
        "((L + U)/2 − M) / (((U − M)² + (M − L)²) / (4M))"
    ),
    source="Emerson & Stoto 1982, J. Amer. Statist. Assoc. 77, 103–108",
    breakdown="0.0625",
    cost="O(n log n) time, O(n) memory",
    smallest_n=3,
    example="symmetry_power(dwell_s)",
)
def symmetry_power(x: Values) -> float:
    """The power that evens out the skewness the letter values show; wild values do not move it.

    Parameters
    ----------
    x : array of float
        Sorted values of one group, with a median M above 0.

    Returns
    -------
    float
        A first guess at a rung: take the nearest. NULL where M is 0 or less, or where L = U = M
        for every letter.

    Notes
    -----
    The line runs through the origin; its slope is the median of the letters' own slopes. Letters
    count from the fourths (F) out to B, 1/64 in each tail, as far as their depth is above 1 and
    their values are not both equal to the median; a letter with an infinite value has slope 0,
    the limit for ever larger ones. The relation is of second order: strongly skewed values lead
    to a power that still falls short, so look again after re-expressing. Values must measure from
    a true zero, as adding a constant changes the answer.

    References
    ----------
    Emerson, J. D. & Stoto, M. A. (1982). J. Amer. Statist. Assoc. 77, 103–108.
    """
    middle = median_sorted(x)
    if not middle > 0.0:
        return math.nan if math.isnan(middle) else NULL
    if math.isinf(middle):
        return math.nan
    slopes = np.empty(_LETTERS)
    count = 0
    depth = (x.size + 1) / 2
    for _ in range(_LETTERS):
        depth = (depth // 1 + 1) / 2
        if depth <= 1.0:
            break
        up = at_depth(x, depth, True) - middle
        down = middle - at_depth(x, depth, False)
        widest = max(up, down)
        if widest == 0.0:
            continue
        if math.isinf(widest):
            slopes[count] = 0.0
        else:
            # In units of the wider side, so that no square is too large or too small.
            a, b = up / widest, down / widest
            slopes[count] = (a - b) / (a * a + b * b) * 2.0 * (middle / widest)
        count += 1
    if count == 0:
        return NULL
    sort_short(slopes[:count])
    return 1.0 - median_sorted(slopes[:count])
