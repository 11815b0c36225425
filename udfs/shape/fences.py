"""Fences: how far out a value may lie before it is looked at."""

import math
from typing import Final

from midspread.udfs.arithmetic.order_statistics import distance, lower_fourth, upper_fourth
from midspread.udfs.declaring import Parameter, Values, aggregate
from midspread.udfs.shape.medcouple import medcouple

FENCE_FIELDS: Final = ("lower", "upper")


@aggregate(
    family="shape",
    parameters=(Parameter("k", "fourth spreads beyond the fourths", default=1.5, low=0.0),),
    fields=FENCE_FIELDS,
    formula=(
        "lower = F_L − k · d, upper = F_U + k · d, d = F_U − F_L, "
        "fourths at depth (⌊(n+1)/2⌋ + 1)/2"
    ),
    source="Tukey 1977, Exploratory Data Analysis, Addison-Wesley",
    breakdown="0.25",
    cost="O(n log n) time, O(n) memory",
    smallest_n=1,
    example="fences(dwell_s, 3)",
)
def fences(x: Values, k: float, out: Values) -> None:
    """Limits k fourth spreads beyond the fourths; values outside deserve a look.

    Parameters
    ----------
    x : array of float
        Sorted values of one group.
    k : float
        0 or more; 1.5 for "outside", 3 for "far out".

    Returns
    -------
    lower, upper : float
        In the unit of x.

    Notes
    -----
    Outside does not mean wrong. On clean normal data about 0.7 % of a large group lies outside,
    and far more of a small or skewed one.

    References
    ----------
    Tukey, J. W. (1977). Exploratory Data Analysis. Addison-Wesley.
    """
    low, high = lower_fourth(x), upper_fourth(x)
    reach = k * distance(high, low)
    out[0] = low - reach
    out[1] = high + reach


@aggregate(
    family="shape",
    fields=FENCE_FIELDS,
    formula=(
        "MC ≥ 0: lower = F_L − 1.5 e^(−4 MC) d, upper = F_U + 1.5 e^(3 MC) d; "
        "MC < 0: exponents −3 MC and 4 MC; MC the medcouple, d = F_U − F_L"
    ),
    source="Hubert & Vandervieren 2008, Comput. Statist. Data Anal. 52, 5186–5201",
    breakdown="0.25",
    cost="O(n log n) time, O(n) memory",
    smallest_n=1,
    linear=False,
    example="adjusted_fences(dwell_s)",
)
def adjusted_fences(x: Values, out: Values) -> None:
    """Fences that reach farther on the long side of skewed data.

    Parameters
    ----------
    x : array of float
        Sorted values of one group.

    Returns
    -------
    lower, upper : float
        In the unit of x.

    Notes
    -----
    The medcouple is unsteady in small groups; below about 100 values prefer `fences`.

    References
    ----------
    Hubert, M. & Vandervieren, E. (2008). Comput. Statist. Data Anal. 52, 5186–5201.
    """
    low, high = lower_fourth(x), upper_fourth(x)
    spread = distance(high, low)
    mc = medcouple(x)
    if mc >= 0:
        below, above = math.exp(-4 * mc), math.exp(3 * mc)
    else:
        below, above = math.exp(-3 * mc), math.exp(4 * mc)
    out[0] = low - 1.5 * below * spread
    out[1] = high + 1.5 * above * spread
