"""`spread_by_level`: whether labels with a higher level also spread more, and the power for it."""

from typing import Any, Final

import numpy as np

from midspread.udfs.arithmetic.order_statistics import (
    distance,
    lower_fourth,
    median_sorted,
    upper_fourth,
)
from midspread.udfs.declaring import NULL, Values, compiled, helper, table_function
from midspread.udfs.drivers import summary_driver
from midspread.udfs.tables.relations import (
    BY,
    column,
    joined,
    keys,
    quoted_name,
    quoted_text,
    relation,
)

_FIELDS: Final = (
    *("label", "n", "level", "spread", "ln_level", "ln_spread"),
    *("slope", "power", "suggested_rung", "n_labels", "n_left_out"),
)


@compiled
def level_and_spread(x: Values, out: Values) -> None:
    """Median and fourth spread of sorted values, NaN last."""
    if np.isnan(x[x.size - 1]):
        out[:2] = np.nan
        return
    out[0] = median_sorted(x)
    out[1] = distance(upper_fourth(x), lower_fourth(x))


@helper("_level_and_spread", "STRUCT(level DOUBLE, spread DOUBLE)")
def levels_and_spreads(work: Any, lists: Any) -> Any:
    """Level and spread of each list of values."""
    import pyarrow as pa

    from midspread.udfs.binding.arrow_columns import numbers_or_null
    from midspread.udfs.binding.computing import groups_of
    from midspread.udfs.grouped import Task, row_numbers, run

    groups = groups_of(lists)
    count = len(groups.offsets) - 1
    out = np.full((count, 2), NULL)
    task = Task(summary_driver("level_and_spread", level_and_spread), np.empty((0, 1)), 1, 0)
    run(groups, [task], out, row_numbers(np.ones(count, np.int64)), work.control, work.threads)
    arrays = [numbers_or_null(np.ascontiguousarray(out[:, place])) for place in range(2)]
    return pa.StructArray.from_arrays(arrays, names=["level", "spread"])


@table_function(
    columns=("tbl", "value", "label"),
    parameters=(BY,),
    fields=_FIELDS,
    formula=(
        "level the median, spread upper − lower fourth (depth (⌊(n+1)/2⌋ + 1)/2) of each label; "
        "slope of resistant_line(ln spread, ln level) over the labels; power = 1 − slope; "
        "suggested_rung the nearest of −3, −2, −1, −1/2, 0, 1/2, 1, 2, 3"
    ),
    source="Tukey 1977, Exploratory Data Analysis, Addison-Wesley, chapter 4",
    breakdown="0.25 of a label's values; about 1/6 of the labels",
    cost="O(n log n) time, one sort a label",
    example="SELECT * FROM spread_by_level('visits', 'dwell_s', 'route')",
)
def spread_by_level(*, tbl: object, value: object, label: object, by: object) -> str:
    """Whether labels with a higher level spread more, and the power that evens their spread.

    One row for each group and label, ordered by the keys, level and label. Where ln spread rises
    along a line of slope b on ln level, the power 1 − b makes the spreads about equal: 1 leaves
    the values, 0 is the logarithm. slope, power and suggested_rung are the same for all labels of
    a group, as are n_labels, the labels with values, and n_left_out, those with spread 0, with a
    level of 0 or less, or with either infinite, which the line leaves out.

    Parameters
    ----------
    tbl : text
        A table, view, CTE, file, glob, or a query in parentheses.
    value : text
        The column of measurements; any numeric type.
    label : text
        The column whose values are to be compared; rows without one are left out.
    by : list of text or text
        Columns whose values make the groups.

    Notes
    -----
    With few labels the slope is a rough guess: two always fit a line. slope is NULL with fewer
    than two labels, or where the outer thirds have the same level. A label with NaN among its
    values has NaN for level and spread and is left out.

    References
    ----------
    Tukey, J. W. (1977). Exploratory Data Analysis. Addison-Wesley, chapter 4.
    """
    function = "spread_by_level"
    compared = column(function, "label", label)
    grouped = [quoted_name(name) for name in keys(function, by, _FIELDS)]
    measured = column(function, "value", value)
    collected = f"_numbers({measured}, {quoted_text(function)}, {quoted_text(str(value))})"
    group = f"GROUP BY {', '.join(grouped)}" if grouped else ""
    same = " AND ".join(f"a.{name} IS NOT DISTINCT FROM b.{name}" for name in grouped) or "true"
    shown = joined([f"a.{name}" for name in grouped])
    return f"""
WITH _midspread_source AS (SELECT * FROM {relation(function, tbl)}),
_midspread_labels AS (
    SELECT {joined(grouped)}{compared} AS _m_label, count({measured}) AS _m_n,
        _level_and_spread({collected}) AS _m_s
    FROM _midspread_source WHERE {compared} IS NOT NULL GROUP BY {joined(grouped)}_m_label
),
_midspread_logs AS (
    SELECT *, _m_n > 0 AND isfinite(_m_s.level) AND isfinite(_m_s.spread) AND _m_s.level > 0
        AND _m_s.spread > 0 AS _m_used,
        CASE WHEN _m_used THEN ln(_m_s.level) END AS _m_level,
        CASE WHEN _m_used THEN ln(_m_s.spread) END AS _m_spread
    FROM _midspread_labels
),
_midspread_lines AS (
    SELECT {joined(grouped)}resistant_line(_m_spread, _m_level) AS _m_line,
        count(*) FILTER (_m_n > 0) AS _m_labels,
        count(*) FILTER (_m_n > 0 AND NOT coalesce(_m_used, false)) AS _m_left_out
    FROM _midspread_logs {group}
)
SELECT {shown}a._m_label AS label, a._m_n AS n, a._m_s.level AS level, a._m_s.spread AS spread,
    a._m_level AS ln_level, a._m_spread AS ln_spread, b._m_line.slope AS slope,
    1 - b._m_line.slope AS power,
    CASE WHEN isnan(power) THEN NULL WHEN power < -2.5 THEN -3 WHEN power < -1.5 THEN -2
        WHEN power < -0.75 THEN -1 WHEN power < -0.25 THEN -0.5 WHEN power < 0.25 THEN 0
        WHEN power < 0.75 THEN 0.5 WHEN power <= 1.5 THEN 1 WHEN power <= 2.5 THEN 2
        WHEN power > 2.5 THEN 3 END::DOUBLE AS suggested_rung,
    b._m_labels AS n_labels, b._m_left_out AS n_left_out
FROM _midspread_logs a JOIN _midspread_lines b ON {same}
ORDER BY {shown}a._m_s.level, a._m_label"""
