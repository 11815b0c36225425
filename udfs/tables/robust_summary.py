"""`robust_summary`: one row of robust figures a group."""

import math
from typing import Final

from midspread.udfs.arithmetic.order_statistics import (
    NORMAL_QUARTILE,
    distance,
    lower_fourth,
    median_absolute_deviation,
    median_sorted,
    upper_fourth,
)
from midspread.udfs.arithmetic.sums import compensated_mean
from midspread.udfs.declaring import Parameter, Values, compiled, table_function
from midspread.udfs.location.m_estimates import huber_location
from midspread.udfs.location.trimming import trimmed_mean, winsorized_mean
from midspread.udfs.scale.winsorized import trimmed_mean_se, winsorized_sd
from midspread.udfs.shape.skewness import bowley_skew, moors_kurtosis, octile_skew
from midspread.udfs.tables.relations import (
    BY,
    column,
    flag,
    joined,
    keys,
    quoted_name,
    quoted_text,
    relation,
)

_FIGURES: Final = (
    "minimum",
    "lower_fourth",
    "median",
    "upper_fourth",
    "maximum",
    "mean",
    "trimmed_mean_10",
    "trimmed_mean_20",
    "winsorized_mean_20",
    "huber_location",
    "sd",
    "mad_scale",
    "winsorized_sd_20",
    "trimmed_mean_20_se",
    "bowley_skew",
    "octile_skew",
    "moors_kurtosis",
    "fence_lower",
    "fence_upper",
)
_COUNTS: Final = ("n_outside", "n_nan", "n_infinite")
SUMMARY_FIELDS: Final = _FIGURES + _COUNTS
"""What `summarise` writes, in this order."""

DEEP_FIGURES: Final = ("hodges_lehmann", "qn_scale", "sn_scale", "medcouple")
"""The figures that cost more than one pass over the sorted values."""

_OUTSIDE: Final = len(_FIGURES)


@compiled
def summarise(x: Values, out: Values) -> None:
    """Fill SUMMARY_FIELDS from sorted values, NaN last; figures that need two values stay NULL."""
    n = x.size
    n_nan = 0
    while n_nan < n and math.isnan(x[n - 1 - n_nan]):
        n_nan += 1
    out[_OUTSIDE + 1] = n_nan
    n_infinite = 0
    while n_infinite < n - n_nan and x[n_infinite] == -math.inf:
        n_infinite += 1
    i = n - n_nan - 1
    while i >= n_infinite and x[i] == math.inf:
        i -= 1
    out[_OUTSIDE + 2] = n_infinite + (n - n_nan - 1 - i)
    if n_nan > 0:
        out[:_OUTSIDE] = math.nan
        return
    low, middle, high = lower_fourth(x), median_sorted(x), upper_fourth(x)
    out[0] = x[0]
    out[1] = low
    out[2] = middle
    out[3] = high
    out[4] = x[n - 1]
    out[5] = compensated_mean(x, 0, n)
    out[6] = trimmed_mean(x, 0.1)
    out[7] = trimmed_mean(x, 0.2)
    out[8] = winsorized_mean(x, 0.2)
    out[9] = huber_location(x, 1.345)
    out[11] = median_absolute_deviation(x, middle) / NORMAL_QUARTILE
    if n >= 2:
        out[10] = winsorized_sd(x, 0.0)
        out[12] = winsorized_sd(x, 0.2)
        out[13] = trimmed_mean_se(x, 0.2)
        out[14] = bowley_skew(x)
        out[15] = octile_skew(x)
        out[16] = moors_kurtosis(x)
    reach = 1.5 * distance(high, low)
    fence_low, fence_high = low - reach, high + reach
    out[17] = fence_low
    out[18] = fence_high
    below = 0
    while below < n and x[below] < fence_low:
        below += 1
    above = 0
    while above < n - below and x[n - 1 - above] > fence_high:
        above += 1
    out[_OUTSIDE] = below + above


_SHOWN: Final = ("n", "n_null", "n_nan", *_FIGURES, "n_outside", "note")

_NOTE: Final = """concat_ws('; ',
    CASE WHEN _m_n = 0 THEN 'no values' END,
    CASE WHEN _m_n BETWEEN 1 AND 9 THEN 'fewer than 10 values' END,
    CASE WHEN _m_rows - _m_n > _m_n AND _m_n > 0
         THEN 'more than half of the rows are NULL' END,
    CASE WHEN _m_s.n_nan > 0 THEN 'NaN among the values, so every figure is NaN' END,
    CASE WHEN _m_s.n_infinite > 0 THEN 'infinite values' END,
    CASE WHEN _m_s.n_nan = 0 AND _m_n > 1 AND _m_s.minimum = _m_s.maximum
         THEN 'all values are equal'
         WHEN _m_s.n_nan = 0 AND _m_s.mad_scale = 0 AND _m_n > 1
         THEN 'half of the values or more are equal, so mad_scale is 0' END,
    CASE WHEN _m_s.n_nan = 0 AND _m_s.lower_fourth = _m_s.upper_fourth
              AND _m_s.minimum < _m_s.maximum
         THEN 'the fourths are equal, so the fences have no width' END,
    CASE WHEN _m_n >= 10 AND _m_s.n_outside * 10 > _m_n
         AND _m_s.lower_fourth < _m_s.upper_fourth
         THEN 'more than a tenth of the values lie outside the fences' END)"""


@table_function(
    columns=("tbl", "value"),
    parameters=(BY, Parameter("deep", "whether to add the costlier figures", False)),
    fields=(*_SHOWN, *(f"{name} (deep)" for name in DEEP_FIGURES)),
    formula=(
        "the figures of the functions of the same names, with shares 0.1 and 0.2 and k = 1.5; "
        "fourths at depth (⌊(n+1)/2⌋ + 1)/2; sd with n − 1"
    ),
    source="Tukey 1977, Exploratory Data Analysis; each figure's own source",
    breakdown="each figure's own: 0 for mean and sd, 0.5 for median and mad_scale",
    cost="O(n log n) time, one sort a group",
    example="SELECT * FROM robust_summary('visits', 'dwell_s', by := 'route')",
)
def robust_summary(*, tbl: object, value: object, by: object, deep: object) -> str:
    """Where the values of each group lie, how far they spread and how they are shaped.

    One row a group, ordered by the keys; NULL keys are a group. n counts the values that are
    not NULL, n_outside those beyond the fences, and `note` says in words what to be wary of.
    A group that holds NaN has NaN figures. With ``deep := true`` come hodges_lehmann, qn_scale,
    sn_scale and medcouple.

    Parameters
    ----------
    tbl : text
        A table, view, CTE, file, glob, or a query in parentheses.
    value : text
        The column of measurements; any numeric type.
    by : list of text or text
        Columns whose values make the groups; none for one group.
    deep : boolean
        Whether to add the costlier figures.

    Notes
    -----
    A summary explores; it proves nothing. Values outside the fences deserve a look and are not
    for that reason wrong. A trimmed mean is the mean of the middle part and does not add up to
    totals.

    References
    ----------
    Tukey, J. W. (1977). Exploratory Data Analysis. Addison-Wesley.
    """
    function = "robust_summary"
    deeper = flag(function, "deep", deep)
    shown = _SHOWN + (DEEP_FIGURES if deeper else ())
    names = keys(function, by, shown)
    grouped = [quoted_name(name) for name in names]
    measured = column(function, "value", value)
    collected = f"_numbers({measured}, {quoted_text(function)}, {quoted_text(str(value))})"
    kind = "_deep_summary" if deeper else "_summary"
    figures = joined([f'_m_s."{name}"' for name in _FIGURES])
    more = "".join(f', _m_s."{name}"' for name in DEEP_FIGURES) if deeper else ""
    order = f"ORDER BY {', '.join(grouped)}" if grouped else ""
    group = f"GROUP BY {', '.join(grouped)}" if grouped else ""
    return f"""
WITH _midspread_source AS (SELECT * FROM {relation(function, tbl)}),
_midspread_groups AS (
    SELECT {joined(grouped)}count(*) AS _m_rows, count({measured}) AS _m_n,
        {kind}({collected}) AS _m_s
    FROM _midspread_source {group}
)
SELECT {joined(grouped)}_m_n AS n, _m_rows - _m_n AS n_null,
    CAST(coalesce(_m_s.n_nan, 0) AS BIGINT) AS n_nan, {figures}
    CAST(_m_s.n_outside AS BIGINT) AS n_outside, {_NOTE} AS note{more}
FROM _midspread_groups {order}"""
