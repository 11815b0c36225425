"""The jackknife for a statistic of one column, and of pairs."""

from typing import TYPE_CHECKING, Final

from midspread.udfs.declaring import Values, batch_aggregate
from midspread.udfs.resampling.bootstrap_interval import STATISTIC_OF_PAIRS
from midspread.udfs.resampling.interval_batches import (
    JACKKNIFE_FIELDS,
    JACKKNIFE_TYPES,
    jackknife_batch,
)
from midspread.udfs.resampling.statistics import STATISTIC

if TYPE_CHECKING:
    from midspread.udfs.binding.batches import Batch

_SOURCE: Final = (
    "Quenouille 1949, J. Roy. Statist. Soc. B 11, 68–84; Tukey 1958, Ann. Math. Statist. 29, 614"
)
_FORMULA: Final = (
    "with T(i) the statistic without value i and M their mean: bias (n − 1)(M − T), "
    "se √((n − 1)/n Σ (T(i) − M)²)"
)


@batch_aggregate(
    family="resampling",
    columns=("x",),
    fields=JACKKNIFE_FIELDS,
    field_types=JACKKNIFE_TYPES,
    parameters=(STATISTIC,),
    formula=_FORMULA,
    source=_SOURCE,
    breakdown="0: one wild value may carry bias and se off, unless the statistic cuts it",
    version=2,
    cost="O(n log n) for means, sd, what is trimmed or winsorized, medians and quantiles; else "
    "1,000 times that of the statistic",
    smallest_n=2,
    example="jackknife(dwell_s, 'trimmed_mean(0.2)')",
)
def jackknife(batch: "Batch") -> dict[str, Values]:
    """Bias and standard error of a statistic from leaving out each value once.

    Parameters
    ----------
    x : array of float
        Values of one group; independent observations are assumed.
    statistic : text
        What to compute: 'trimmed_mean(0.2)', 'mean', 'sd', or any one-column function with a
        single number as result.

    Returns
    -------
    STRUCT
        estimate; bias, to be subtracted from it if one corrects for it; se; n. bias and se are
        NULL where the statistic needs all of the values there are.

    Notes
    -----
    **Inconsistent for medians and other single quantiles**: their se does not tend to the true one
    however many values there are; use `bootstrap_interval`, whose se does. The same goes for
    statistics that jump, such as half_sample_mode, and roughly for those made of medians.

    In one exact pass for trimmed and winsorized means and standard deviations, the mean and sd
    among them, and for medians and quantiles. Of other statistics with more than 1,000 values 400
    values are left out, among them the 64 outermost at each end, and the rest is interpolated.

    References
    ----------
    Quenouille, M. H. (1949). Approximate tests of correlation in time-series. J. Roy. Statist.
    Soc. B 11, 68–84.
    Tukey, J. W. (1958). Bias and confidence in not-quite large samples. Ann. Math. Statist. 29,
    614.
    Efron, B. & Tibshirani, R. J. (1993). An Introduction to the Bootstrap. Chapman & Hall,
    chapter 11.
    """
    return jackknife_batch(batch)


@batch_aggregate(
    family="resampling",
    columns=("y", "x"),
    fields=JACKKNIFE_FIELDS,
    field_types=JACKKNIFE_TYPES,
    parameters=(STATISTIC_OF_PAIRS,),
    formula=f"pairs left out together; {_FORMULA}",
    source=_SOURCE,
    breakdown="0: one wild pair may carry bias and se off, unless the statistic cuts it",
    cost="up to 1,000 times that of the statistic",
    smallest_n=2,
    example="jackknife_yx(dwell_s, boardings, 'spearman')",
)
def jackknife_yx(batch: "Batch") -> dict[str, Values]:
    """Bias and standard error of a statistic of pairs from leaving out each pair once.

    Parameters
    ----------
    y : array of float
        First column of the pairs of one group; pairs are assumed independent.
    x : array of float
        Second column.
    statistic : text
        What to compute: 'spearman', 'kendall_tau', or any function of (y, x) with a single number
        as result.

    Returns
    -------
    STRUCT
        estimate; bias, to be subtracted from it if one corrects for it; se; n, the number of
        pairs. bias and se are NULL where the statistic has no value without some pair.

    Notes
    -----
    Of more than 1,000 pairs 1,000 at even distances in the order of y are left out, each standing
    for as many: the se is then itself an estimate, good to a few percent.

    References
    ----------
    Quenouille, M. H. (1949). Approximate tests of correlation in time-series. J. Roy. Statist.
    Soc. B 11, 68–84.
    Tukey, J. W. (1958). Bias and confidence in not-quite large samples. Ann. Math. Statist. 29,
    614.
    """
    return jackknife_batch(batch)
