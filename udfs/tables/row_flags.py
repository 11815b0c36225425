"""`row_flags`: every row with the limits of its group and its distance from the middle."""

from typing import Final

from midspread.udfs.declaring import Parameter, ParameterError, table_function
from midspread.udfs.outlying.limits import LARGE_GROUP, RULES
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

_FIELDS: Final = ("lower", "upper", "outside", "distance", "rule")
_RULE: Final = Parameter(
    "rule",
    f"how limits are set; NULL takes fences below {LARGE_GROUP} values, else adjusted_fences",
    "NULL",
    kind="text",
    choices=RULES,
)
_K: Final = Parameter(
    "k",
    "fourth spreads beyond the fourths (1.5), or scales from the median (3)",
    "NULL",
    low=0.0,
)
_USUAL_K: Final = {"fences": 1.5, "median_mad": 3.0}


@table_function(
    columns=("tbl", "value"),
    parameters=(BY, _RULE, _K),
    fields=_FIELDS,
    formula=(
        "fences: F_L − k · d, F_U + k · d, d = F_U − F_L; adjusted_fences: with the medcouple; "
        "median_mad: median ∓ k · mad_scale; distance = abs(value − median) / mad_scale"
    ),
    source=(
        "Tukey 1977; Hubert & Vandervieren 2008, Comput. Statist. Data Anal. 52, 5186–5201; "
        "median_mad: Hampel 1974, J. Amer. Statist. Assoc. 69, 383–393"
    ),
    breakdown="0.25 by fences, 0.5 by median_mad",
    cost="O(n log n) time, one sort a group, and a join back to the rows",
    example="SELECT * FROM row_flags('visits', 'dwell_s', by := 'route') WHERE outside",
)
def row_flags(*, tbl: object, value: object, by: object, rule: object, k: object) -> str:
    """Every row with its group's limits, whether it lies outside, and how far from the middle.

    All rows and all columns of the table come back, in no set order, with five columns more.

    Parameters
    ----------
    tbl : text
        A table, view, CTE, file, glob, or a query in parentheses.
    value : text
        The column of measurements; any numeric type.
    by : list of text or text
        Columns whose values make the groups; none for one group. NULL keys are a group.
    rule : text
        'fences', 'adjusted_fences' or 'median_mad'. NULL takes fences for groups of fewer than
        100 values and adjusted_fences for larger ones.
    k : number
        0 or more: fourth spreads beyond the fourths, 1.5 if not given, or robust standard
        deviations from the median, 3 if not given. The adjusted fences have their k fixed at
        1.5, on which their exponents rest; so k goes with the other two rules alone.

    Returns
    -------
    lower, upper : float
        The limits of the row's group, in the unit of value.
    outside : boolean
        Whether value < lower or value > upper; NULL where value is NULL or NaN.
    distance : float
        abs(value − median) / mad_scale of the group, whatever the rule: robust standard
        deviations from the centre. NULL where mad_scale is 0, as it is when half of the values
        or more are equal.
    rule : text
        The rule that set the limits; NULL in a group without values.

    Notes
    -----
    Flagged does not mean wrong: a limit says where to look. Nor does unflagged mean right: a
    clock stuck at a usual value lies inside, and where a quarter of a group or more is wild on one
    side (half of it under median_mad) outliers mask each other. Where the fourths are equal, or
    mad_scale is 0 under median_mad, the limits have no width and every other value is outside. A
    NaN makes the limits of its group NaN, and then nothing there is flagged: leave NaN out first.

    False alarms on clean data, as per cent of values flagged / per cent of groups with a flag
    (tests/bench/false_alarms.py; median_mad with k = 3)::

        rule             shape          n = 20     n = 50     n = 100    n = 500    n = 2000
        fences           uniform        0.1 / 2    0.0 / 0    0.0 / 0    0.0 / 0    0.0 / 0
        fences           normal         1.6 / 23   1.2 / 37   0.9 / 52   0.8 / 95   0.7 / 100
        fences           t, 3 df        5.5 / 66   5.7 / 93   5.5 / 100  5.6 / 100  5.5 / 100
        fences           log-normal 0.5 3.9 / 54   3.9 / 85   3.8 / 97   3.8 / 100  3.8 / 100
        fences           exponential    4.7 / 62   4.9 / 91   4.8 / 99   4.8 / 100  4.8 / 100
        fences           log-normal 1   7.1 / 81   7.6 / 99   7.7 / 100  7.8 / 100  7.7 / 100
        adjusted_fences  uniform        2.0 / 21   0.5 / 9    0.1 / 2    0.0 / 0    0.0 / 0
        adjusted_fences  normal         4.7 / 54   3.3 / 66   2.3 / 76   1.1 / 98   0.8 / 100
        adjusted_fences  t, 3 df        7.9 / 79   7.4 / 96   6.6 / 100  5.9 / 100  5.6 / 100
        adjusted_fences  log-normal 0.5 5.4 / 58   4.1 / 72   3.1 / 84   1.8 / 100  1.4 / 100
        adjusted_fences  exponential    4.3 / 45   2.7 / 47   1.5 / 49   0.4 / 73   0.3 / 99
        adjusted_fences  log-normal 1   6.2 / 63   5.0 / 78   4.0 / 89   2.5 / 100  2.0 / 100
        median_mad       uniform        0.3 / 3    0.0 / 0    0.0 / 0    0.0 / 0    0.0 / 0
        median_mad       normal         1.4 / 19   0.7 / 23   0.4 / 31   0.3 / 73   0.3 / 100
        median_mad       t, 3 df        5.0 / 61   4.6 / 88   4.3 / 99   4.3 / 100  4.2 / 100
        median_mad       log-normal 0.5 4.4 / 57   4.0 / 84   3.8 / 97   3.7 / 100  3.6 / 100
        median_mad       exponential    6.9 / 72   6.3 / 94   6.1 / 99   5.9 / 100  5.9 / 100
        median_mad       log-normal 1   10.0 / 88  9.8 / 99   9.8 / 100  9.8 / 100  9.7 / 100

    In large groups nearly every one has a flag, by any rule: look at the share, not at whether
    there are any. Where the shape is skewed in itself, re-express first (the logarithm of dwell
    times), then flag.

    References
    ----------
    Tukey, J. W. (1977). Exploratory Data Analysis. Addison-Wesley.
    Hoaglin, D. C., Iglewicz, B. & Tukey, J. W. (1986). J. Amer. Statist. Assoc. 81, 991–999.
    Hubert, M. & Vandervieren, E. (2008). Comput. Statist. Data Anal. 52, 5186–5201.
    Hampel, F. R. (1974). J. Amer. Statist. Assoc. 69, 383–393.
    """
    function = "row_flags"
    grouped = [quoted_name(name) for name in keys(function, by, _FIELDS)]
    measured = column(function, "value", value)
    chosen = None if rule is None else _RULE.check_text(function, rule)
    given = number(function, _K, k)
    if given is not None and chosen not in _USUAL_K:
        raise ParameterError(
            f"{function}: k goes with the rules 'fences' and 'median_mad' only, got k := {given:g} "
            f"with rule := {'NULL' if chosen is None else quoted_text(chosen)}; write for example "
            f"rule := 'fences', k := {given:g}."
        )
    width = given if given is not None else _USUAL_K.get(chosen or "", 1.5)
    said = f"{quoted_text(function)}, {quoted_text(str(value))}"
    aliases = [f"_midspread_key_{i}" for i in range(1, len(grouped) + 1)]
    named = "".join(f"{key} AS {a}, " for key, a in zip(grouped, aliases, strict=True))
    same = " AND ".join(
        f"_midspread_source.{key} IS NOT DISTINCT FROM _midspread_groups.{alias}"
        for key, alias in zip(grouped, aliases, strict=True)
    )
    # A query in parentheses may give other rows when it is run again.
    kept = "MATERIALIZED" if str(tbl).lstrip().startswith("(") else "NOT MATERIALIZED"
    # The count is not used: it makes the engine say which column is missing.
    limits = "_midspread_groups._midspread_limits"
    number_of_row = f"_number_of(_midspread_source.{measured}, {said})"
    return f"""
WITH _midspread_source AS {kept} (SELECT * FROM {relation(function, tbl)}),
_midspread_groups AS (
    SELECT {named}count({measured}) AS _midspread_n, _row_limits(_numbers({measured}, {said}),
        CAST({"NULL" if chosen is None else quoted_text(chosen)} AS VARCHAR),
        CAST({width!r} AS DOUBLE)) AS _midspread_limits
    FROM _midspread_source {f"GROUP BY {', '.join(grouped)}" if grouped else ""}
)
SELECT _midspread_source.*, {limits}.lower AS "lower", {limits}.upper AS "upper",
    CASE WHEN isnan({number_of_row}) OR isnan({limits}.lower) OR isnan({limits}.upper) THEN NULL
        ELSE {number_of_row} < {limits}.lower OR {number_of_row} > {limits}.upper
        END AS "outside",
    CASE WHEN {limits}.scale > 0
        THEN abs({number_of_row} - {limits}.centre) / {limits}.scale END AS "distance",
    {limits}.rule AS "rule"
FROM _midspread_source JOIN _midspread_groups ON {same or "true"}
WHERE {own_columns_differ(function, "_midspread_source", _FIELDS)}"""
