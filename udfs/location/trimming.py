"""Means of the middle part, and the trimean."""

from typing import Final

from midspread.udfs.arithmetic.order_statistics import (
    lower_fourth,
    median_sorted,
    midpoint,
    upper_fourth,
)
from midspread.udfs.arithmetic.sums import compensated_mean, mean_with_tails
from midspread.udfs.declaring import Parameter, Values, aggregate, compiled

SHARE: Final = Parameter(
    "share", "share of the values cut from each tail", default=0.2, low=0.0, high=0.5
)


@compiled
def cut_from_each_tail(n: int, share: float) -> int:
    """g = ⌊share · n⌋ with the product in double precision, as scipy and R take it."""
    return int(share * n)


@compiled
def cut_of(n: int, share: float) -> int:
    """How many values go from each tail; of a median all but the one or two in the middle."""
    g = cut_from_each_tail(n, share)
    return (n - 1) // 2 if share == 0.5 or 2 * g >= n else g


@aggregate(
    family="location",
    parameters=(SHARE,),
    formula="mean of x_(g+1) … x_(n−g), g = ⌊share · n⌋; share 0 is the mean, 0.5 the median",
    source="Tukey & McLaughlin 1963, Sankhyā A 25, 331–352",
    breakdown="share",
    cost="O(n log n) time, O(n) memory",
    smallest_n=1,
    example="trimmed_mean(dwell_s, 0.1)",
)
def trimmed_mean(x: Values, share: float) -> float:
    """Mean of what is left after the same share of values is cut from each tail.

    Parameters
    ----------
    x : array of float
        Sorted values of one group, in the unit of the measurement.
    share : float
        Share cut from each tail, 0 to 0.5.

    Returns
    -------
    float
        In the unit of x. NaN when the kept part holds both +Inf and −Inf.

    Notes
    -----
    The mean of the middle part; multiplied by n it does not give the total.

    References
    ----------
    Tukey, J. W. & McLaughlin, D. H. (1963). Sankhyā A 25, 331–352.
    """
    n = x.size
    g = cut_from_each_tail(n, share)
    if share == 0.5 or 2 * g >= n:
        return median_sorted(x)
    return compensated_mean(x, g, n - g)


@aggregate(
    family="location",
    parameters=(SHARE,),
    formula=(
        "mean after the g lowest values become x_(g+1) and the g highest x_(n−g), "
        "g = ⌊share · n⌋; share 0.5 is the median"
    ),
    source="Dixon 1960, Ann. Math. Statist. 31, 385–391; Tukey & McLaughlin 1963",
    breakdown="share",
    cost="O(n log n) time, O(n) memory",
    smallest_n=1,
    example="winsorized_mean(dwell_s, 0.1)",
)
def winsorized_mean(x: Values, share: float) -> float:
    """Mean after the values in each tail are pulled in to the nearest kept value.

    Parameters
    ----------
    x : array of float
        Sorted values of one group.
    share : float
        Share pulled in at each end, 0 to 0.5.

    Returns
    -------
    float
        In the unit of x.

    References
    ----------
    Dixon, W. J. (1960). Ann. Math. Statist. 31, 385–391.
    """
    n = x.size
    g = cut_from_each_tail(n, share)
    if share == 0.5 or 2 * g >= n:
        return median_sorted(x)
    return mean_with_tails(x, g, n - g, g)


@aggregate(
    family="location",
    formula="(lower fourth + 2 · median + upper fourth) / 4, fourths at depth (⌊(n+1)/2⌋ + 1)/2",
    source="Tukey 1977, Exploratory Data Analysis, Addison-Wesley",
    breakdown="0.25",
    cost="O(n log n) time, O(n) memory",
    smallest_n=1,
    example="trimean(dwell_s)",
)
def trimean(x: Values) -> float:
    """Weighted average of the median and the two fourths.

    Parameters
    ----------
    x : array of float
        Sorted values of one group.

    Returns
    -------
    float
        In the unit of x.

    References
    ----------
    Tukey, J. W. (1977). Exploratory Data Analysis. Addison-Wesley.
    """
    return midpoint(midpoint(lower_fourth(x), upper_fourth(x)), median_sorted(x))
