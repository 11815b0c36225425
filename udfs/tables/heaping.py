"""`heaping`: the rounding grid that values sit on, and what it does to quantiles."""

from typing import Final

from midspread.udfs.declaring import table_function
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
    "n",
    "step",
    "on_step",
    "unit",
    "ends_in_0",
    "ends_in_5",
    "whipple",
    "digit_dissimilarity",
    "n_distinct",
    "tied",
    "most_frequent_share",
    "quantile_error",
    "mad_scale",
    "error_in_scales",
    "note",
)
_NOTE: Final = """concat_ws('; ',
    CASE WHEN _m_n = 0 THEN 'no values' END,
    CASE WHEN isnan(_m_h.mad_scale) THEN 'NaN among the values, so every figure is NaN' END,
    CASE WHEN _m_n BETWEEN 1 AND 9 THEN 'fewer than 10 values: no step is sought' END,
    CASE WHEN _m_n > 1 AND _m_h.n_distinct = 1 THEN 'all values are equal: no step is sought'
         WHEN _m_n > 1 AND _m_h.mad_scale = 0
         THEN 'half of the values or more are equal, so mad_scale is 0' END,
    CASE WHEN NOT isnan(_m_h.step) AND _m_h.error_in_scales > 0.1
         THEN 'half a step exceeds a tenth of mad_scale: medians, fourths and fences move in jumps'
         END)"""


@table_function(
    columns=("tbl", "value"),
    parameters=(BY,),
    fields=_FIELDS,
    formula=(
        "step: the largest of 1, 2, 2.5, 5 times a power of ten of which nine tenths of the values "
        "are multiples; whipple = 500 · (ends_in_0 + ends_in_5); "
        "digit_dissimilarity = 50 · Σ abs(share of digit − 0.1); quantile_error = step / 2"
    ),
    source=(
        "Whipple 1919, Vital Statistics, Wiley; Myers 1940, Trans. Actuar. Soc. Amer. 41, 395–415"
    ),
    breakdown="the step: 0.1 of the values",
    cost="O(n log n) time, one sort a group; up to 60 passes over the sorted values",
    example="SELECT * FROM heaping('visits', 'dwell_s', by := 'route')",
)
def heaping(*, tbl: object, value: object, by: object) -> str:
    """The rounding grid each group's values seem to sit on, digit preference, ties, consequences.

    One row a group, ordered by the keys; NULL keys are a group.

    Parameters
    ----------
    tbl : text
        A table, view, CTE, file, glob, or a query in parentheses.
    value : text
        The column of measurements; any numeric type.
    by : list of text or text
        Columns whose values make the groups; none for one group.

    Returns
    -------
    n : int
        Values that are not NULL.
    step : float
        The coarsest grid that explains the values, in the unit of value; see the notes.
    on_step : float
        Share of all values that are multiples of the step.
    unit : float
        The power of ten in which multiples of the step are written: 1 for steps of 1, 2 and 5,
        0.1 for a step of 2.5.
    ends_in_0, ends_in_5 : float
        Shares of the values written to this unit, zeros left out, whose last digit is 0, or 5.
    whipple : float
        Whipple's index of these shares: 100 without preference, 500 when all end in 0 or 5.
    digit_dissimilarity : float
        Per cent of these values that would have to move for all ten last digits to be equally
        frequent, 0 to 90: Myers's figure without his blending, which evens out the fall of a
        population with age.
    n_distinct : int
        Different values.
    tied : float
        Share of the values that another row has too.
    most_frequent_share : float
        Share of the value that occurs most often.
    quantile_error : float
        Half a step: no quantile, nor anything between two order statistics, can be farther than
        this from what unrounded values on the grid would give. Twice that for a difference of
        two quantiles and for the MAD; all of it doubled where the values were cut off, not
        rounded.
    mad_scale : float
        The robust standard deviation, to set the error against.
    error_in_scales : float
        quantile_error / mad_scale; NULL where mad_scale is 0.
    note : text
        What to be wary of, in words.

    Notes
    -----
    The step is sought from the largest down. Zeros lie on every grid and one frequent value may
    stand there for another reason, so at least nine tenths of all others must be multiples of
    the step, and the most frequent value too. Multiples are told in decimals, exactly: 0.3 is
    three times 0.1, for FLOAT too. Grids that do not pass through zero are not found, nor steps
    such as 1/3 or a quarter of an hour in seconds (900 shows as 100). NULL when there are
    fewer than 10 values, or a single one repeated, or no such step.

    Seeming is not proof: values may be round because the thing is (timetables, prices, counts).
    Digits are evenly spread only where values spread over many tens of units; narrow data show
    preference without anyone rounding. Ties make rank tests conservative and ties at a quantile
    hold it fast until a large share of the data has moved.

    References
    ----------
    Whipple, G. C. (1919). Vital Statistics. Wiley.
    Myers, R. J. (1940). Transactions of the Actuarial Society of America 41, 395–415.
    """
    function = "heaping"
    grouped = [quoted_name(name) for name in keys(function, by, _FIELDS)]
    measured = column(function, "value", value)
    said = f"{quoted_text(function)}, {quoted_text(str(value))}"
    figures = joined([f'_m_h."{name}" AS "{name}"' for name in _FIELDS[1:-1]])
    return f"""
WITH _midspread_source AS (SELECT * FROM {relation(function, tbl)}),
_midspread_groups AS (
    SELECT {joined(grouped)}count({measured}) AS _m_n,
        _heaping_figures(_numbers(_as_written({measured}), {said})) AS _m_h
    FROM _midspread_source {f"GROUP BY {', '.join(grouped)}" if grouped else ""}
)
SELECT {joined(grouped)}_m_n AS n, {figures}{_NOTE} AS note
FROM _midspread_groups {f"ORDER BY {', '.join(grouped)}" if grouped else ""}"""
