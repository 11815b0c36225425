"""`influential_values`: what the removal of one value moves."""

from typing import Final

from midspread.udfs.declaring import Parameter, table_function
from midspread.udfs.resampling.statistics import STATISTIC, read_statistic
from midspread.udfs.sensitivity import values_left_out as values_left_out
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

_TOP: Final = Parameter(
    "top", "how many rows a group at most", default=20, low=1, high=1e6, whole=True
)
_FIELDS: Final = (
    "lowest",
    "highest",
    "count",
    "estimate",
    "estimate_without",
    "change",
    "rank",
)


@table_function(
    columns=("tbl", "value"),
    parameters=(BY, STATISTIC, _TOP),
    fields=_FIELDS,
    formula=(
        "change = statistic without one value − statistic of all values; neighbouring values with "
        "the same change are one row"
    ),
    source=(
        "Tukey 1958, Ann. Math. Statist. 29, 614; Hampel 1974, JASA 69, 383–393; Efron & "
        "Tibshirani 1993, An Introduction to the Bootstrap, Chapman & Hall, chapter 11"
    ),
    breakdown="that of the statistic",
    cost=(
        "O(n log n) time for means, trimmed and winsorized means, medians and quantiles; else "
        "distinct values times that of the statistic; O(n) memory"
    ),
    example="SELECT * FROM influential_values('visits', 'dwell_s', by := 'route', top := 5)",
)
def influential_values(
    *, tbl: object, value: object, by: object, statistic: object, top: object
) -> str:
    """Which single values move the estimate of each group most, and by how much.

    One row for each group and range of values, ordered by the keys and the absolute change, at most
    `top` rows a group. A row says what the removal of any ONE value from lowest to highest does;
    count is how many values are in that range. Tied influence comes as one row: the whole lower
    tail of a trimmed mean is one range, the whole upper tail another. Exact.

    Parameters
    ----------
    tbl : text
        A table, view, CTE, file, glob, or a query in parentheses.
    value : text
        The column of measurements; any numeric type. Rows without a value are skipped.
    by : list of text or text
        Columns whose values make the groups; none for one group.
    statistic : text
        A one-column function with its parameters, or mean, median, sd.
    top : int
        At most so many rows a group, 1 to 1,000,000.

    Returns
    -------
    lowest, highest : DOUBLE
        The range of values; equal where it is one value.
    count : BIGINT
        How many values of the group are in it.
    estimate, estimate_without : DOUBLE
        Of all values of the group, and without one value of the range.
    change : DOUBLE
        estimate_without − estimate, in the unit of the value.
    rank : BIGINT
        1 for the largest absolute change of the group; equal sizes share a rank and stand in the
        order of their values.

    Notes
    -----
    **Outliers can mask each other**: with two stuck clocks at the same reading, the removal of
    one may change next to nothing while the removal of both changes much. Small changes here are
    no proof that no few values decide the answer; compare a trimmed mean with the mean, or leave
    whole vehicles and days out with `leave_one_out`. An influential value is not a wrong one: look
    at how it came about before it goes. After such a search p-values and intervals are optimistic.
    Where a figure steers safety, local rules and licensed practice decide.

    Mean, median, trimmed_mean, winsorized_mean, trimean, quantile_hf, iqr_scale, bowley_skew and
    octile_skew go at any size. Of any other statistic each distinct value is left out in turn,
    for groups whose number of values times number of distinct values is at most 400,000,000
    (20,000 times 20,000); beyond it the call is refused.

    One row with change NULL stands for all values where the rest is too few for the statistic. NaN
    among the values of a group makes all of its figures NaN.

    References
    ----------
    Tukey, J. W. (1958). Ann. Math. Statist. 29, 614.
    Hampel, F. R. (1974). JASA 69, 383–393.
    Efron, B. & Tibshirani, R. J. (1993). An Introduction to the Bootstrap. Chapman & Hall.
    """
    function = "influential_values"
    grouped = [quoted_name(name) for name in keys(function, by, _FIELDS)]
    measured = column(function, "value", value)
    text = STATISTIC.check_text(function, statistic)
    read_statistic(function, text)
    most = whole(function, _TOP, top)
    collected = f"_numbers({measured}, {quoted_text(function)}, {quoted_text(str(value))})"
    group = f"GROUP BY {', '.join(grouped)}" if grouped else ""
    figures = ", ".join(f'_m_found."{name}"' for name in _FIELDS)
    return f"""
WITH _midspread_source AS (SELECT * FROM {relation(function, tbl)}),
_midspread_groups AS (
    SELECT {joined(grouped)}
        _influential_values({collected}, {quoted_text(text)}, {most}) AS _m_ranges
    FROM _midspread_source {group}
),
_midspread_rows AS (
    SELECT {joined(grouped)}unnest(_m_ranges) AS _m_found,
        generate_subscripts(_m_ranges, 1) AS _m_at
    FROM _midspread_groups
)
SELECT {joined(grouped)}{figures} FROM _midspread_rows ORDER BY {joined(grouped)}_m_at"""
