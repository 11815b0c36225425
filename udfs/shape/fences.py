"""Fences: how far out a value may lie before it is looked at."""

from typing import Final

from midspread.udfs.arithmetic.order_statistics import distance, lower_fourth, upper_fourth
from midspread.udfs.declaring import Parameter, Values, aggregate

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
