"""`location_estimates`: every location estimator, and how far it stands from the mean."""

from typing import Final

from midspread.udfs.declaring import Parameter, table_function
from midspread.udfs.resampling.randomness import SEED
from midspread.udfs.sensitivity import joint_estimates as joint_estimates
from midspread.udfs.tables.comparing import CONFIDENCE, checked_number
from midspread.udfs.tables.relations import (
    BY,
    column,
    joined,
    keys,
    quoted_name,
    quoted_text,
    relation,
    whole,
)

_RESAMPLES: Final = Parameter(
    "resamples",
    "how many samples are drawn from a group of at most 10,000 values",
    default=400,
    low=2,
    high=1e5,
    whole=True,
)
_FIELDS: Final = ("estimator", "n", *joint_estimates.FIGURES)


@table_function(
    columns=("tbl", "value"),
    parameters=(BY, CONFIDENCE, _RESAMPLES, SEED),
    fields=_FIELDS,
    formula=(
        "estimate ∓ t · se; se = standard deviation of the estimator over joint resamples, or, "
        "above 10,000 values, over 200 random parts, divided by √200; difference_in_se = "
        "(estimate − mean) / se of that difference, from the same resamples or parts"
    ),
    source=(
        "Efron 1979, Ann. Statist. 7, 1–26; Mahalanobis 1946, J. R. Statist. Soc. 109, 325–378; "
        "Wolter 2007, Introduction to Variance Estimation, Springer, chapter 2"
    ),
    breakdown="each estimator's own; standard errors break down where theirs do",
    cost="resamples times n up to 10,000 values, O(n log n) beyond; O(n) memory",
    example="SELECT * FROM location_estimates('visits', 'dwell_s', by := 'route')",
)
def location_estimates(
    *,
    tbl: object,
    value: object,
    by: object,
    confidence: object,
    resamples: object,
    seed: object,
) -> str:
    """Every location estimate of each group with its error, and how far it is from the mean.

    One row for each group and estimator, ordered by the keys and from the mean to what cuts most.
    Where the estimates agree within their errors it matters little which is reported; where they
    do not, the group is skewed or a few values decide its mean.

    Parameters
    ----------
    tbl : text
        A table, view, CTE, file, glob, or a query in parentheses.
    value : text
        The column of measurements; any numeric type. Rows without a value are skipped.
    by : list of text or text
        Columns whose values make the groups; none for one group.
    confidence : number
        Of the interval lower to upper, between 0 and 1; for each estimate by itself.
    resamples : int
        How many samples are drawn from a group of at most 10,000 values, 2 to 100,000.
    seed : int
        Another one draws, and deals, anew.

    Returns
    -------
    estimator : VARCHAR
        mean; trimmed_mean_10, trimmed_mean_20 and winsorized_mean_20, which cut 10 or 20 % from
        each tail; median; trimean; huber_location; bisquare_location; hodges_lehmann.
    n : BIGINT
        Number of values.
    estimate : DOUBLE
        As the function of that name gives it.
    se, lower, upper : DOUBLE
        Standard error and interval; NULL for fewer than two values.
    difference : DOUBLE
        estimate − mean.
    difference_in_se : DOUBLE
        difference in standard errors of the difference itself. Both estimates come from the same
        values, so this is far smaller than their own; NULL for the mean, and where it is 0.

    Notes
    -----
    Up to 10,000 values a group: the bootstrap, with one set of resamples for all estimators. Above
    that, random groups: the values are dealt at random into 200 equal parts, every estimator is
    computed in each part, and the standard deviation over the parts is divided by √200. Such an se
    is itself good to about 5 % (to 1 / √(2 · resamples) for the bootstrap: 3.5 % at 400). Both
    depend on seed and values alone, never on the order of rows. t has n − 1 degrees of freedom,
    or 199.

    A difference of many standard errors says that the two estimate different things, as they do in
    any skewed distribution; it does not say which is right. With millions of rows nearly every
    difference is many standard errors: look at its size. Rows are taken to be independent; visits
    of one vehicle or one day are not, and then se is too small: see `unit_intervals`. Picking the
    estimate that suits after looking at all of them makes its interval optimistic.

    half_sample_mode is not among them: it comes near its target as n to the power −1/3, for which
    neither method gives a standard error. An infinite value makes the se of the mean NaN, and
    NaN among the values all figures.

    References
    ----------
    Efron, B. (1979). Ann. Statist. 7, 1–26.
    Mahalanobis, P. C. (1946). J. R. Statist. Soc. 109, 325–378.
    Wolter, K. M. (2007). Introduction to Variance Estimation, chapter 2. Springer.
    """
    function = "location_estimates"
    grouped = [quoted_name(name) for name in keys(function, by, _FIELDS)]
    measured = column(function, "value", value)
    level = checked_number(function, CONFIDENCE, confidence)
    number, chance = whole(function, _RESAMPLES, resamples), whole(function, SEED, seed)
    collected = f"_numbers({measured}, {quoted_text(function)}, {quoted_text(str(value))})"
    group = f"GROUP BY {', '.join(grouped)}" if grouped else ""
    figures = ", ".join(f'_m_found."{name}"' for name in _FIELDS)
    return f"""
WITH _midspread_source AS (SELECT * FROM {relation(function, tbl)}),
_midspread_groups AS (
    SELECT {joined(grouped)}_location_estimates({collected}, {level!r}::DOUBLE, {number}, {chance})
        AS _m_estimates
    FROM _midspread_source {group}
),
_midspread_rows AS (
    SELECT {joined(grouped)}unnest(_m_estimates) AS _m_found,
        generate_subscripts(_m_estimates, 1) AS _m_at
    FROM _midspread_groups
)
SELECT {joined(grouped)}{figures} FROM _midspread_rows ORDER BY {joined(grouped)}_m_at"""
