"""The limits that `row_flags` sets around the values of one group."""

import math
from typing import Final

from midspread.udfs.arithmetic.order_statistics import (
    NORMAL_QUARTILE,
    median_absolute_deviation,
    median_sorted,
)
from midspread.udfs.declaring import Values, compiled
from midspread.udfs.shape.fences import adjusted_fences, fences

RULES: Final = ("fences", "adjusted_fences", "median_mad")
"""The rules by name; kernels know them by their place."""

LARGE_GROUP: Final = 100
"""From so many values on the adjusted fences are steady enough to be the default."""

LIMIT_FIELDS: Final = ("lower", "upper", "centre", "scale", "rule")
"""What `limits_of_group` writes, in this order; the rule as its place."""

_FENCES: Final = 0
_ADJUSTED_FENCES: Final = 1
_MEDIAN_MAD: Final = 2


@compiled
def limits_of_group(x: Values, settings: Values, out: Values) -> None:
    """Fill LIMIT_FIELDS from sorted values, NaN last.

    Parameters
    ----------
    x : ndarray
        Sorted values of one group.
    settings : ndarray
        The place of the rule, −1 to choose by the number of values; k.
    out : ndarray
        Prefilled with NULL.
    """
    rule = int(settings[0])
    if rule < 0:
        rule = _FENCES if x.size < LARGE_GROUP else _ADJUSTED_FENCES
    out[4] = rule
    if math.isnan(x[x.size - 1]):
        out[:4] = math.nan
        return
    centre = median_sorted(x)
    scale = median_absolute_deviation(x, centre) / NORMAL_QUARTILE
    out[2] = centre
    out[3] = scale
    if rule == _MEDIAN_MAD:
        out[0] = centre - settings[1] * scale
        out[1] = centre + settings[1] * scale
    elif rule == _FENCES:
        fences(x, settings[1], out)
    else:
        adjusted_fences(x, out)
