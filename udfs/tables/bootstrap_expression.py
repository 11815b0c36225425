"""`bootstrap_expression`: an interval for any SQL aggregate expression."""

from typing import Final

from midspread.udfs.declaring import Parameter, table_function
from midspread.udfs.resampling.expressions import read_expression
from midspread.udfs.resampling.parameters import CONFIDENCE
from midspread.udfs.resampling.randomness import SEED
from midspread.udfs.tables.relations import (
    BY,
    UNIT,
    column,
    joined,
    keys,
    null_unit,
    number,
    quoted_name,
    quoted_text,
    relation,
    whole,
)

_FIELDS: Final = ("n", "n_units", "estimate", "lower", "upper", "se", "resamples")
_RESAMPLES: Final = Parameter(
    "resamples", "how many samples are drawn", default=1000, low=1, high=1e6, whole=True
)
_COPIES_AT_ONCE: Final = 1 << 26
_COLLECTED_AT_ONCE: Final = 1 << 23
"""Rows of resamples that are written out at once; fewer where aggregates collect them."""
_SAMPLED: Final = 8
"""About so many rows of a group, evenly spaced, make the key of its random numbers."""


@table_function(
    columns=("tbl", "expression"),
    parameters=(BY, _RESAMPLES, CONFIDENCE, UNIT, SEED),
    fields=_FIELDS,
    formula=(
        "as many rows (units) as the group has are drawn from it with replacement, resamples "
        "times, and the expression computed of each; lower and upper are the draws number "
        "(R + 1)(1 ∓ confidence)/2, se their standard deviation"
    ),
    source="Efron 1979, Ann. Statist. 7, 1–26; limits: Davison & Hinkley 1997, equation 5.6",
    breakdown="the expression's own",
    cost=(
        "O(resamples · n) time; memory for the rows, a portion of the drawn rows and "
        "groups · resamples draws"
    ),
    example=(
        "SELECT * FROM bootstrap_expression('visits', 'sum(boardings) / sum(dwell_s)', "
        "by := 'route', resamples := 200)"
    ),
)
def bootstrap_expression(
    *,
    tbl: object,
    expression: object,
    by: object,
    resamples: object,
    confidence: object,
    unit: object,
    seed: object,
) -> str:
    """Bootstrap interval for any SQL aggregate expression, such as a ratio of two sums.

    One row a group, ordered by the keys. n counts the rows of the group, n_units its units (NULL
    without unit), resamples the draws that have a value. estimate is the expression of the group
    itself.

    Parameters
    ----------
    tbl : text
        A table, view, CTE, file, glob, or a query in parentheses.
    expression : text
        One aggregate expression over its columns with a number as result, of the engine's
        functions and these, with FILTER if wanted: 'sum(boardings) / sum(dwell_s)' or
        'trimmed_mean(dwell_s, 0.1) / median(dwell_s)'.
    by : list of text or text
        Columns whose values make the groups; none for one group.
    resamples : int
        How many samples are drawn, 1 to 1,000,000.
    confidence : float
        How often the interval is to cover, above 0 and below 1.
    unit : text
        A column such as a vehicle or a day whose rows are drawn together, for rows that are not
        independent; NULL in it is refused.
    seed : int
        Chooses the random numbers.

    Notes
    -----
    Each resample draws exactly as many rows as the group has, so totals and counts are resampled
    rightly as well; how often each row is drawn is multinomial. With unit, as many units as the
    group has are drawn, each with all of its rows, and n varies from draw to draw. Fewer than 30
    units give intervals that are too short.

    The limits are percentiles of the draws, interpolated on the normal scale, as in
    ``bootstrap_interval`` with method := 'percentile', whose bca limits are better where the
    statistic is one of a single column. Draws that are NULL, for a divisor of 0 say, are left out
    and show in the column resamples; a draw that is NaN makes lower, upper and se NaN.

    The same rows give the same draws in any order of rows: a group's rows are ordered by the
    columns that the expression reads (after the unit), equal rows may change places, and the
    random numbers are keyed by seed and by the content of some of the rows. Our functions and
    exact sums (whole numbers, DECIMAL) then give the same bits every time; the engine's own
    floating-point aggregates, such as sum and avg of DOUBLE, may vary in the last digits with
    threads, and aggregates that depend on the order of rows, such as first or string_agg, mean
    nothing here. Functions whose result is chance or the time of day are refused.

    The resamples are written out in portions, one after the other: as many resamples of the whole
    table at once as make 64 million rows, or 8 million where an aggregate keeps its values as
    median and our functions do (some 150 MB for each such call), and one at least.

    A group of one row has an interval of no width: it says nothing about certainty.

    References
    ----------
    Efron, B. (1979). Ann. Statist. 7, 1–26.
    Davison, A. C. & Hinkley, D. V. (1997). Bootstrap Methods and their Application. Cambridge
    University Press.
    """
    function = "bootstrap_expression"
    names = keys(function, by, _FIELDS)
    read = read_expression(function, expression)
    wanted = whole(function, _RESAMPLES, resamples)
    level = number(function, CONFIDENCE, confidence)
    chance = whole(function, SEED, seed)
    grouped = [quoted_name(name) for name in names]
    read_columns = [quoted_name(name) for name in read.columns]
    content = list(read_columns)
    constant = [key for key in grouped if key.lower() in {name.lower() for name in content}]
    carried = list({name.lower(): name for name in [*grouped, *content]}.values())
    unit_column = position = ""
    units = "NULL" if unit is None else "coalesce(_midspread_positions, 0)"
    order = [f"{name} ASC NULLS LAST" for name in content]
    at_once = _COLLECTED_AT_ONCE if read.collects else _COPIES_AT_ONCE
    within = f"PARTITION BY {', '.join(grouped)}" if grouped else ""
    if unit is not None:
        own = column(function, "unit", unit)
        sentence = quoted_text(null_unit(function, str(unit)))
        unit_column = f", coalesce({own}, error({sentence})) AS _midspread_unit"
        position = f"dense_rank() OVER ({within} ORDER BY _midspread_unit)"
        content.insert(0, "_midspread_unit")
        order.insert(0, "_midspread_unit")
    ordered = f"ORDER BY {', '.join(order)}" if order else ""
    group = f"GROUP BY {', '.join(grouped)}" if grouped else ""
    # The value first, then what must be a number: the macro cannot see the type of an aggregate.
    figure = f"_number_of(_midspread_value, {quoted_text(function)}, 'expression')"
    same = " AND ".join(f"r.{key} IS NOT DISTINCT FROM g.{key}" for key in grouped) or "true"
    return f"""
WITH RECURSIVE _midspread_source AS (SELECT * FROM {relation(function, tbl)}),
_midspread_chosen AS (
    SELECT {", ".join(carried) or "NULL AS _midspread_nothing"}{unit_column} FROM _midspread_source
),
_midspread_ranked AS (
    SELECT *, row_number() OVER ({within} {ordered}) AS _midspread_rank,
        {position or "_midspread_rank"} AS _midspread_position
    FROM _midspread_chosen
),
_midspread_rows AS MATERIALIZED (
    SELECT *, count(*) OVER _midspread_group AS _midspread_n,
        max(_midspread_position) OVER _midspread_group AS _midspread_positions
    FROM _midspread_ranked WINDOW _midspread_group AS ({within})
),
_midspread_figures AS (
    SELECT {joined(grouped)}count(*) AS _midspread_n,
        max(_midspread_positions) AS _midspread_positions,
        md5_number_lower(concat(count(*), ' rows: ', {_content_text(content)})) AS _midspread_key,
        {read.text} AS _midspread_value
    FROM _midspread_rows {group}
),
_midspread_groups AS MATERIALIZED (
    SELECT *, {figure} AS _midspread_estimate, row_number() OVER () AS _midspread_number
    FROM _midspread_figures
),
_midspread_ready AS MATERIALIZED (
    SELECT {joined([f"r.{name}" for name in read_columns])}r._midspread_position,
        r._midspread_positions, _midspread_key, _midspread_number
    FROM _midspread_rows AS r JOIN _midspread_groups AS g ON {same}
    ORDER BY _midspread_number, _midspread_rank
),
_midspread_portion AS MATERIALIZED (
    SELECT greatest({at_once} // greatest(count(*), 1), 1) AS _midspread_size
    FROM _midspread_ready
),
_midspread_draws AS (
    SELECT CAST(NULL AS BIGINT) AS _midspread_number, CAST(0 AS INTEGER) AS _midspread_resample,
        CAST(NULL AS DOUBLE) AS _midspread_draw
    UNION ALL
    SELECT _midspread_number, _midspread_resample, {figure}
    FROM (
        SELECT _midspread_number, _midspread_resample, {read.text} AS _midspread_value
        FROM (
            SELECT {joined(read_columns)}_midspread_number,
                unnest(_resamples_of_rows(_midspread_key, _midspread_positions,
                    _midspread_position, CAST({chance} AS UBIGINT), _midspread_start,
                    _midspread_stop)) AS _midspread_resample
            FROM _midspread_ready CROSS JOIN (
                SELECT max(_midspread_resample) AS _midspread_start,
                    least(max(_midspread_resample) + any_value(_midspread_size), {wanted})
                        AS _midspread_stop
                FROM _midspread_draws CROSS JOIN _midspread_portion
            ) WHERE _midspread_start < {wanted}
        ) GROUP BY {joined(constant)}_midspread_number, _midspread_resample
    )
),
_midspread_limits AS (
    SELECT _midspread_number, list(_midspread_draw) AS _midspread_values,
        list(_midspread_resample) AS _midspread_resamples
    FROM _midspread_draws WHERE _midspread_number IS NOT NULL GROUP BY _midspread_number
),
_midspread_found AS (
    SELECT {joined(grouped)}_midspread_n AS n,
        CAST({units} AS BIGINT) AS n_units,
        _midspread_estimate AS estimate,
        _percentile_limits(_midspread_values, _midspread_resamples, _midspread_estimate,
            CAST({level!r} AS DOUBLE)) AS _midspread_limits
    FROM _midspread_groups LEFT JOIN _midspread_limits USING (_midspread_number)
)
SELECT {joined(grouped)}n, n_units, estimate, _midspread_limits.lower AS lower,
    _midspread_limits.upper AS upper, _midspread_limits.se AS se,
    coalesce(_midspread_limits.resamples, 0) AS resamples
FROM _midspread_found {f"ORDER BY {', '.join(grouped)}" if grouped else ""}"""


def _content_text(content: list[str]) -> str:
    """SQL for the text of some of a group's rows, the same in any order of rows."""
    if not content:
        return "''"
    evenly = f"(_midspread_rank - 1) % greatest((_midspread_n - 1) // {_SAMPLED}, 1) = 0"
    rows = f"list(row({', '.join(content)}) ORDER BY _midspread_rank) FILTER ({evenly})"
    # -0.0 and 0.0 are one number with two texts.
    return f"replace(CAST({rows} AS VARCHAR), '-0.0', '0.0')"
