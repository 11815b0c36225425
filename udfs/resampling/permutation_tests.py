"""Permutation tests: is a difference, or an association, more than chance would make it?"""

from typing import TYPE_CHECKING, Any, Final

from midspread.udfs.declaring import batch_aggregate
from midspread.udfs.parameters import OPTIONAL, Parameter
from midspread.udfs.resampling.permutation.parameters import (
    ALTERNATIVE,
    RESAMPLES,
    STRATUM,
    statistic_parameter,
)
from midspread.udfs.resampling.randomness import SEED

if TYPE_CHECKING:
    from midspread.udfs.binding.batches import Batch

_FIELDS: Final = ("estimate", "p_value", "resamples", "exact")
_TYPES: Final = {"resamples": "BIGINT", "exact": "BOOLEAN"}
_P_VALUE: Final = (
    "count / total over all arrangements when there are no more than resamples, else "
    "(count + 1) / (resamples + 1); counted is what is at least as extreme as T"
)
_SOURCE: Final = (
    "Fisher 1935, The Design of Experiments; Pitman 1937, Suppl. J. R. Statist. Soc. 4, 119–130; "
    "Phipson & Smyth 2010, Stat. Appl. Genet. Mol. Biol. 9(1), 39"
)
_BREAKDOWN: Final = "that of the statistic"


@batch_aggregate(
    family="resampling",
    columns=("x", "label"),
    keys=("label",),
    parameters=(
        statistic_parameter("mean"),
        ALTERNATIVE,
        RESAMPLES,
        Parameter(
            "baseline",
            "the label that is subtracted; NULL: the smaller one",
            OPTIONAL,
            kind="level",
        ),
        SEED,
        Parameter(
            "studentize",
            "divide by the standard error, for labels of unequal spread",
            False,
            kind="flag",
        ),
        STRATUM,
    ),
    fields=_FIELDS,
    field_types=_TYPES,
    formula=(
        "T = statistic of the other label's values − statistic of the baseline's; labels are "
        f"rearranged over the values; p = {_P_VALUE}"
    ),
    source=f"{_SOURCE}; Janssen 1997, Statist. Probab. Lett. 36, 9–21",
    breakdown=_BREAKDOWN,
    cost=(
        "O(resamples · n) time, for the mean about 1/60 of a random number a value, for medians "
        "and quantiles O(n log n + resamples · log n); "
        "O(n + resamples) memory"
    ),
    version=2,
    smallest_n=2,
    example="permutation_test(dwell_s, payment, statistic := 'trimmed_mean(0.2)')",
)
def permutation_test(batch: "Batch") -> dict[str, Any]:
    """Test of a difference between two labels by rearranging the labels.

    Parameters
    ----------
    x : float
        The measured values.
    label : any simple type
        What is compared; two values in a group.
    statistic : text
        What is computed of each label's values: 'mean', 'median', 'trimmed_mean(0.2)' or any
        other function of one column with a single number as result.
    alternative : text
        'two-sided' counts by |T|; 'greater' and 'less' count differences of one sign.
    resamples : float
        Whole number from 1 to 10,000,000. When there are no more different arrangements than
        this, all are gone through and p is exact.
    baseline : value of label
        Its statistic is subtracted. NULL takes the smaller of the two labels.
    seed : float
        Whole number from 0 on; another seed draws other arrangements.
    studentize : flag
        Divide T by its standard error, in the data and in each arrangement. For the mean and
        trimmed means with a share below 0.5.
    stratum : column
        Labels are rearranged only among rows with the same stratum; rows without one form a
        stratum of their own.

    Returns
    -------
    struct
        estimate (the difference, also when studentized), p_value, resamples (arrangements gone
        through), exact (whether these are all). All NULL for a group with one label only;
        estimate and p_value are NULL where a label has too few values for the statistic, and
        NaN when a value is NaN.

    Notes
    -----
    The hypothesis tested is that the labels do not matter at all: equal distributions. Labels
    of unequal spread and size can be called different by the plain test though their means are
    equal (20 against 80 values with spreads 3 to 1: 24 % at a nominal 5 %); studentize := true
    keeps near 5 %.

    An arrangement counts as tied with T when it is within 1e-12 of the largest |T|, or within
    2⁻⁴⁹ of the statistics' own size. An arrangement for which the statistic has no value counts
    as extreme. A standard error of 0 gives an infinite T, or 0 where the difference is 0.

    Rows are taken as independent. A p-value says nothing about the size of a difference, and
    one found after a search through many groups is too small.

    For the mean each arrangement is a random set of values of the right size; its sum comes
    from tables of the sums of eight values each. For medians, quantiles and what is made of a
    few of them, without stratum, only the values that the statistic reads are drawn: 9,999
    arrangements take about a second, whatever the number of rows. Other statistics are computed
    anew on the values of each label: 9,999 arrangements of a million rows take minutes, so
    start with resamples := 199.

    References
    ----------
    Fisher, R. A. (1935). The Design of Experiments. Oliver & Boyd.
    Pitman, E. J. G. (1937). Suppl. J. R. Statist. Soc. 4, 119–130.
    Janssen, A. (1997). Statist. Probab. Lett. 36, 9–21.
    Phipson, B. & Smyth, G. K. (2010). Stat. Appl. Genet. Mol. Biol. 9(1), 39.
    """
    from midspread.udfs.resampling.permutation.comparing import compute_comparison

    return compute_comparison(batch, two_labels=True)


@batch_aggregate(
    family="resampling",
    columns=("x", "label"),
    keys=("label",),
    parameters=(statistic_parameter("mean"), RESAMPLES, SEED, STRATUM),
    fields=_FIELDS,
    field_types=_TYPES,
    formula=(
        "T = Σ n_j (s_j − s̄)² over the labels j, s_j the statistic of n_j values, "
        f"s̄ = Σ n_j s_j / n; labels are rearranged over the values; p = {_P_VALUE}"
    ),
    source="Pitman 1938, Biometrika 29, 322–335; Phipson & Smyth 2010",
    breakdown=_BREAKDOWN,
    cost="O(resamples · n) time, O(n + resamples) memory",
    smallest_n=2,
    example="permutation_test_k(dwell_s, route, statistic := 'median', resamples := 999)",
)
def permutation_test_k(batch: "Batch") -> dict[str, Any]:
    """Test of differences among several labels by rearranging the labels.

    Parameters
    ----------
    x : float
        The measured values.
    label : any simple type
        What is compared; two values in a group or more.
    statistic : text
        What is computed of each label's values, as for permutation_test.
    resamples : float
        Whole number from 1 to 10,000,000; all arrangements when there are no more.
    seed : float
        Whole number from 0 on.
    stratum : column
        Labels are rearranged only among rows with the same stratum; rows without one form a
        stratum of their own.

    Returns
    -------
    struct
        estimate (T, in the square of the unit of x), p_value, resamples, exact. All NULL for a
        group with one label only; estimate and p_value are NULL where a label has too few values
        for the statistic, and NaN when a value is NaN.

    Notes
    -----
    For the mean, T is the sum of squares between labels, and p is that of the F of a one-way
    analysis of variance: with the total fixed, the one grows with the other. Large T count as
    extreme; ties as for permutation_test.

    Rows are taken as independent. Which labels differ it does not say; tests of all pairs that
    follow must be corrected for their number.

    References
    ----------
    Pitman, E. J. G. (1938). Biometrika 29, 322–335.
    Phipson, B. & Smyth, G. K. (2010). Stat. Appl. Genet. Mol. Biol. 9(1), 39.
    """
    from midspread.udfs.resampling.permutation.comparing import compute_comparison

    return compute_comparison(batch, two_labels=False)


@batch_aggregate(
    family="resampling",
    columns=("d",),
    parameters=(statistic_parameter("mean"), ALTERNATIVE, RESAMPLES, SEED),
    fields=_FIELDS,
    field_types=_TYPES,
    formula=(
        "T = statistic of the differences d; the sign of each is left or flipped, all 2ⁿ ways "
        f"alike; p = {_P_VALUE}"
    ),
    source="Fisher 1935, The Design of Experiments, section 21; Phipson & Smyth 2010",
    breakdown=_BREAKDOWN,
    cost="O(resamples · n) time, O(n + resamples) memory",
    smallest_n=2,
    example="sign_flip_test(dwell_s - 45, 'mean', 'greater')",
)
def sign_flip_test(batch: "Batch") -> dict[str, Any]:
    """Test of paired differences about 0 by flipping their signs.

    Parameters
    ----------
    d : float
        The differences, one a pair.
    statistic : text
        What is computed of the differences: the mean or another location.
    alternative : text
        'two-sided' counts by |T|; 'greater' and 'less' count one sign.
    resamples : float
        Whole number from 1 to 10,000,000. All 2ⁿ flips when there are no more: with 9,999 up to
        13 differences, with 32,768 up to 15.
    seed : float
        Whole number from 0 on.

    Returns
    -------
    struct
        estimate (the statistic of d), p_value, resamples (flips gone through), exact (whether
        these are all). NULL below two differences; NaN when one is NaN.

    Notes
    -----
    The hypothesis tested is that differences are independent and symmetric about 0. Each pair
    is its own stratum, so there is no further one. Differences of 0 are kept; flipping them
    changes nothing. Ties as for permutation_test.

    References
    ----------
    Fisher, R. A. (1935). The Design of Experiments. Oliver & Boyd.
    Phipson, B. & Smyth, G. K. (2010). Stat. Appl. Genet. Mol. Biol. 9(1), 39.
    """
    from midspread.udfs.resampling.permutation.flipping import compute_sign_flips

    return compute_sign_flips(batch)


@batch_aggregate(
    family="resampling",
    columns=("y", "x"),
    parameters=(statistic_parameter("spearman"), ALTERNATIVE, RESAMPLES, SEED, STRATUM),
    fields=_FIELDS,
    field_types=_TYPES,
    formula=f"T = statistic of (y, x); the x are rearranged against the y; p = {_P_VALUE}",
    source="Pitman 1937, Suppl. J. R. Statist. Soc. 4, 225–232; Phipson & Smyth 2010",
    breakdown=_BREAKDOWN,
    cost="resamples times that of the statistic; O(n + resamples) memory",
    smallest_n=2,
    example="permutation_test_yx(dwell_s, boardings, resamples := 999)",
)
def permutation_test_yx(batch: "Batch") -> dict[str, Any]:
    """Test of an association between two columns by rearranging one against the other.

    Parameters
    ----------
    y : float
        One column.
    x : float
        The other one, which is rearranged.
    statistic : text
        'spearman', 'kendall_tau' or any other function of (y, x) with a single number as result.
    alternative : text
        'two-sided' counts by |T|; 'greater' and 'less' count one sign.
    resamples : float
        Whole number from 1 to 10,000,000. All n! orders when there are no more: with 9,999 up
        to 7 pairs.
    seed : float
        Whole number from 0 on.
    stratum : column
        Values are rearranged only among rows with the same stratum; rows without one form a
        stratum of their own.

    Returns
    -------
    struct
        estimate (the statistic), p_value, resamples (orders gone through), exact (whether these
        are all). estimate and p_value are NULL where the statistic has no value, as for a column
        of equal values, and NaN when a value is NaN.

    Notes
    -----
    The hypothesis tested is that x and y are independent. Rows are taken as independent of each
    other: series with a trend or a daily course need a stratum, or another method. Ties as for
    permutation_test. A rearrangement without a value counts as extreme.

    References
    ----------
    Pitman, E. J. G. (1937). Suppl. J. R. Statist. Soc. 4, 225–232.
    Phipson, B. & Smyth, G. K. (2010). Stat. Appl. Genet. Mol. Biol. 9(1), 39.
    """
    from midspread.udfs.resampling.permutation.pairing import compute_association

    return compute_association(batch)
