"""`leave_one_out`: the estimate without each unit."""

from typing import Final

from midspread.udfs.declaring import table_function
from midspread.udfs.resampling.statistics import STATISTIC, read_statistic
from midspread.udfs.sensitivity import units_left_out as units_left_out
from midspread.udfs.tables.relations import (
    BY,
    column,
    joined,
    keys,
    quoted_name,
    quoted_text,
    relation,
)

_FIELDS: Final = ("unit", "n_left_out", *units_left_out.FIGURES, "rank")


@table_function(
    columns=("tbl", "value", "unit"),
    parameters=(BY, STATISTIC),
    fields=_FIELDS,
    formula=(
        "change = statistic without the unit's rows − statistic of all rows; change_in_spreads = "
        "change / mad_scale of the changes of all units of the group"
    ),
    source=(
        "Tukey 1958, Ann. Math. Statist. 29, 614; Hampel 1974, JASA 69, 383–393; Belsley, Kuh & "
        "Welsch 1980, Regression Diagnostics, Wiley"
    ),
    breakdown="that of the statistic, counted in rows",
    cost=(
        "O(n log n) time for means, trimmed and winsorized means, medians and quantiles; else "
        "units times that of the statistic; O(n) memory"
    ),
    example="SELECT * FROM leave_one_out('visits', 'dwell_s', 'vehicle', by := 'route')",
)
def leave_one_out(
    *, tbl: object, value: object, unit: object, by: object, statistic: object
) -> str:
    """What the estimate of each group would be without each unit: a vehicle, a day, a site.

    One row for each group and unit, ordered by the keys and the rank: the unit that moves the
    estimate most comes first. Every figure is exact; nothing is drawn or approximated.

    Parameters
    ----------
    tbl : text
        A table, view, CTE, file, glob, or a query in parentheses.
    value : text
        The column of measurements; any numeric type. Rows without a value are skipped.
    unit : text
        The column whose rows are left out together; any simple type. Rows where it is NULL belong
        to no unit: they are never left out, and always count in the estimate.
    by : list of text or text
        Columns whose values make the groups; none for one group.
    statistic : text
        A one-column function with its parameters, or mean, median, sd.

    Returns
    -------
    unit : as the column unit
        What is left out.
    n_left_out : BIGINT
        How many rows that takes away.
    estimate, estimate_without : DOUBLE
        Of all rows of the group, and of those that are left; NULL where too few are.
    change : DOUBLE
        estimate_without − estimate, in the unit of the value.
    change_in_spreads : DOUBLE
        change as a multiple of the spread of the changes (their mad_scale over the units of the
        group): far above 3, a unit stands apart from the others. NULL where half of the changes or
        more are equal.
    rank : BIGINT
        1 for the largest absolute change of the group; equal changes share a rank.

    Notes
    -----
    A unit with many rows moves the estimate more than one with few: look at n_left_out too. Two
    odd units can mask each other, and units that differ are not wrong units. That a unit moves
    the estimate says where to look, and is no proof; leaving it out after looking makes every
    later p-value and interval optimistic. Where a figure steers safety, local rules and licensed
    practice decide.

    NaN among the values of a group makes all of its figures NaN, and the rank NULL.

    References
    ----------
    Tukey, J. W. (1958). Ann. Math. Statist. 29, 614.
    Hampel, F. R. (1974). JASA 69, 383–393.
    Belsley, D. A., Kuh, E. & Welsch, R. E. (1980). Regression Diagnostics. Wiley.
    """
    function = "leave_one_out"
    grouped = [quoted_name(name) for name in keys(function, by, _FIELDS)]
    measured = column(function, "value", value)
    owner = column(function, "unit", unit)
    text = STATISTIC.check_text(function, statistic)
    read_statistic(function, text)
    collected = f"_numbers({measured}, {quoted_text(function)}, {quoted_text(str(value))})"
    group = f"GROUP BY {', '.join(grouped)}" if grouped else ""
    within = f"PARTITION BY {', '.join(grouped)}" if grouped else ""
    figures = ", ".join(f"_m_found.{name}" for name in units_left_out.FIGURES)
    return f"""
WITH _midspread_source AS (SELECT * FROM {relation(function, tbl)}),
_midspread_units AS (
    SELECT {joined(grouped)}{owner} AS _m_unit, count({measured}) AS _m_n, {collected} AS _m_values
    FROM _midspread_source GROUP BY {joined(grouped)}{owner} HAVING _m_n > 0
),
_midspread_groups AS (
    SELECT {joined(grouped)}list(_m_unit ORDER BY _m_unit NULLS LAST) AS _m_units,
        _leave_one_out(list(_m_values ORDER BY _m_unit NULLS LAST), bool_or(_m_unit IS NULL),
            {quoted_text(text)}) AS _m_left
    FROM _midspread_units {group}
),
_midspread_rows AS (
    SELECT {joined(grouped)}unnest(_m_units) AS _m_unit, unnest(_m_left) AS _m_found
    FROM _midspread_groups
),
_midspread_sized AS (
    SELECT *, CASE WHEN NOT isnan(_m_found.change) THEN abs(_m_found.change) END AS _m_size
    FROM _midspread_rows WHERE _m_unit IS NOT NULL
)
SELECT {joined(grouped)}_m_unit AS unit, CAST(_m_found.n_left_out AS BIGINT) AS n_left_out,
    {figures}, CASE WHEN _m_size IS NOT NULL
        THEN rank() OVER ({within} ORDER BY _m_size DESC NULLS LAST) END AS rank
FROM _midspread_sized ORDER BY {joined(grouped)}_m_size DESC NULLS LAST, unit"""
