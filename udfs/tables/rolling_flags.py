"""`rolling_flags`: values that stand out from their neighbours along a series."""

from typing import Final

from midspread.udfs.declaring import Parameter, table_function
from midspread.udfs.tables.relations import (
    BY,
    column,
    keys,
    number,
    own_columns_differ,
    quoted_name,
    quoted_text,
    relation,
)

_FIELDS: Final = ("median", "scale", "outside", "distance")
_HALF_WIDTH: Final = Parameter(
    "half_width", "rows on each side of the middle one", 5, low=1, high=100_000, whole=True
)
_K: Final = Parameter("k", "scales from the window's median", 3, low=0.0)
_FLOOR: Final = Parameter(
    "floor", "the least scale, in the unit of value; 0 for none", "NULL", low=0.0
)


@table_function(
    columns=("tbl", "value", "position"),
    parameters=(BY, _HALF_WIDTH, _K, _FLOOR),
    fields=_FIELDS,
    formula=(
        "median m and s = max(MAD / Φ⁻¹(3/4), floor) of the rows from half_width before to "
        "half_width after; outside where abs(value − m) > k · s; distance = abs(value − m) / s"
    ),
    source=(
        "Davies & Gather 1993, J. Amer. Statist. Assoc. 88, 782–792; "
        "along a series: Pearson 2002, IEEE Trans. Control Syst. Technol. 10, 55–63"
    ),
    breakdown="half of the values of a window",
    cost="O(n · half_width) moves of memory, O(n log n) to order the rows",
    example="SELECT * FROM rolling_flags('visits', 'dwell_s', 'visit', by := 'route')",
)
def rolling_flags(
    *,
    tbl: object,
    value: object,
    position: object,
    by: object,
    half_width: object,
    k: object,
    floor: object,
) -> str:
    """Hampel's identifier along a series: does a row stand out from the rows around it.

    All rows and all columns of the table come back, in no set order, with four columns more.

    Parameters
    ----------
    tbl : text
        A table, view, CTE, file, glob, or a query in parentheses.
    value : text
        The column of measurements; any numeric type.
    position : text
        The column that orders the rows of a group: a number, date, time or text.
    by : list of text or text
        Columns whose values tell the series apart; none for one series.
    half_width : int
        From 1 to 100,000: the window holds this many rows before and after the row, and the row.
    k : float
        0 or more: how many scales from the window's median is outside.
    floor : float
        0 or more, in the unit of value: no window's scale is taken to be smaller. NULL for the
        floor given in the notes.

    Returns
    -------
    median : float
        Of the row's window, the row itself included.
    scale : float
        MAD / 0.6745 of the window, or the floor where that is larger.
    outside : boolean
        NULL where value or position is NULL, and where NaN is involved.
    distance : float
        abs(value − median) / scale; NULL where scale is 0.

    Notes
    -----
    Flagged does not mean wrong: a bus that waits for a ferry stands out and waits nonetheless.

    Edges: within half_width rows of either end of a series the window is cut short, not moved;
    in windows of one or two values nothing is outside at the usual k.
    NULL: a row without a value keeps its place. It enters no window and has no flag, yet its
    median tells what its neighbours suggest. A row whose position is NULL stands nowhere: its
    figures are NULL. NaN: windows that hold one are NaN and their rows not flagged.
    Positions that repeat within a group are refused, as the order would be chance.

    Floor: values rounded to a step often leave more than half of a window equal; its MAD is then
    0 and every other value would be outside. By default the floor of a group is half of the
    larger of two figures: the rounding step that `heaping` finds (so that with k = 3 a value one
    step off is not outside and two steps off is), and the median of all abs(value − median of its
    window) / 0.6745, the scale of the whole series about its running median (so that a chance
    calm of a window does not accuse its neighbours). In a stretch that is truly calm set a
    smaller floor, or split it off with `by`.

    False alarms on clean normal series, per cent of rows, k = 3 (tests/bench/false_alarms.py);
    h the half_width; at "step 1" values are rounded to one standard deviation, at "step 2" to two::

        floor            values         h = 3      h = 5      h = 10     h = 25
        as by default    unrounded      3.8        2.5        1.4        0.7
        as by default    step 1         0.6        0.4        0.2        0.1
        as by default    step 2         0.4        0.3        0.2        0.3
        none             unrounded      4.8        2.9        1.4        0.7
        none             step 1         14.7       11.2       6.4        2.2
        none             step 2         23.8       26.2       29.7       31.6

    References
    ----------
    Davies, L. & Gather, U. (1993). J. Amer. Statist. Assoc. 88, 782–792.
    Pearson, R. K. (2002). IEEE Trans. Control Syst. Technol. 10, 55–63.
    """
    function = "rolling_flags"
    grouped = [quoted_name(name) for name in keys(function, by, _FIELDS)]
    measured = column(function, "value", value)
    ordering = column(function, "position", position)
    rows = number(function, _HALF_WIDTH, half_width)
    times = number(function, _K, k)
    least = number(function, _FLOOR, floor)
    said = f"{quoted_text(function)}, {quoted_text(str(value))}"
    placed = f"FILTER (WHERE {ordering} IS NOT NULL)"
    number_of_row = f"_number_of(_midspread_source.{measured}, {said})"
    # The count is not used: it makes the engine say which column is missing.
    figures = "_midspread_windows"
    away = f"abs({number_of_row} - {figures}._midspread_median)"
    return f"""
WITH _midspread_source AS MATERIALIZED (
    SELECT *, row_number() OVER () AS _midspread_row
    FROM (SELECT * FROM {relation(function, tbl)})
),
_midspread_series AS (
    SELECT count({measured}) AS _midspread_n, list(_midspread_row) {placed} AS _midspread_rows,
        _rolling_figures(
        list(_number_of({measured}, {said})) {placed}, list({ordering}) {placed},
        {quoted_text(str(position))}, CAST({rows!r} AS DOUBLE),
        CAST({"NULL" if least is None else repr(least)} AS DOUBLE)) AS _midspread_figures
    FROM _midspread_source {f"GROUP BY {', '.join(grouped)}" if grouped else ""}
),
_midspread_windows AS (
    SELECT unnest(_midspread_rows) AS _midspread_row,
        unnest(_midspread_figures.median) AS _midspread_median,
        unnest(_midspread_figures.scale) AS _midspread_scale
    FROM _midspread_series
)
SELECT _midspread_source.* EXCLUDE (_midspread_row), _midspread_median AS "median",
    _midspread_scale AS "scale",
    CASE WHEN isnan({number_of_row}) OR isnan(_midspread_median) OR isnan(_midspread_scale)
        THEN NULL ELSE {away} > {times!r} * _midspread_scale END AS "outside",
    CASE WHEN _midspread_scale > 0 THEN {away} / _midspread_scale END AS "distance"
FROM _midspread_source
LEFT JOIN _midspread_windows ON _midspread_source._midspread_row = {figures}._midspread_row
WHERE {own_columns_differ(function, "_midspread_source", _FIELDS)}"""
