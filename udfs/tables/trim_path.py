"""`trim_path`: the trimmed mean as more and more is cut."""

from typing import Final

from midspread.udfs.declaring import Parameter, table_function
from midspread.udfs.tables.relations import (
    BY,
    column,
    joined,
    keys,
    number_list,
    quoted_name,
    quoted_text,
    relation,
)

_FIELDS: Final = ("share", "n_kept", "trimmed_mean", "se", "winsorized_mean")
_COMPUTED: Final = ("trimmed_mean", "trimmed_mean_se", "winsorized_mean")


@table_function(
    columns=("tbl", "value"),
    parameters=(
        BY,
        Parameter(
            "shares",
            "shares cut from each tail, each from 0 to 0.5",
            "[0, 0.05, 0.1, 0.2, 0.25, 0.3, 0.4, 0.5]",
        ),
    ),
    fields=_FIELDS,
    formula=(
        "trimmed_mean, trimmed_mean_se and winsorized_mean at each share; n_kept = n − 2⌊share · n⌋"
    ),
    source="Tukey & McLaughlin 1963, Sankhyā A 25, 331–352",
    breakdown="share",
    cost="O(n log n) time, one sort a group",
    example="SELECT * FROM trim_path('visits', 'dwell_s', shares := [0, 0.1, 0.2])",
)
def trim_path(*, tbl: object, value: object, by: object, shares: object) -> str:
    """How the trimmed mean of each group moves and settles as more is cut from the tails.

    One row for each group and share, ordered by the keys and the share. Where the estimate
    still moves, wild values decide it; where it has settled, the middle does. se is NULL at
    share 0.5, where the estimate is the median and n_kept the one or two values it rests on.

    Parameters
    ----------
    tbl : text
        A table, view, CTE, file, glob, or a query in parentheses.
    value : text
        The column of measurements; any numeric type.
    by : list of text or text
        Columns whose values make the groups.
    shares : list of numbers
        Each from 0 to 0.5.

    Notes
    -----
    Choosing the share after looking at the path makes the standard error too small.

    References
    ----------
    Tukey, J. W. & McLaughlin, D. H. (1963). Sankhyā A 25, 331–352.
    """
    function = "trim_path"
    grouped = [quoted_name(name) for name in keys(function, by, _FIELDS)]
    steps = sorted(set(number_list(function, "shares", shares, 0.0, 0.5)))
    measured = column(function, "value", value)
    collected = f"_numbers({measured}, {quoted_text(function)}, {quoted_text(str(value))})"
    width = len(_COMPUTED)
    computed = quoted_text(",".join(_COMPUTED * len(steps)))
    arguments = ", ".join(f"{share!r}::DOUBLE" for share in steps for _ in _COMPUTED)
    listed = ", ".join(f"{share!r}::DOUBLE" for share in steps)
    group = f"GROUP BY {', '.join(grouped)}" if grouped else ""
    return f"""
WITH _midspread_source AS (SELECT * FROM {relation(function, tbl)}),
_midspread_groups AS (
    SELECT {joined(grouped)}count({measured}) AS _midspread_n,
        _estimates({collected}, {computed}, [{arguments}]) AS _midspread_e
    FROM _midspread_source {group}
),
_midspread_steps AS (
    SELECT *, unnest([{listed}]) AS share, unnest(range({len(steps)})) * {width} AS _midspread_at
    FROM _midspread_groups
)
SELECT {joined(grouped)}share,
    CASE WHEN _midspread_n = 0 THEN 0
         WHEN share = 0.5 THEN 2 - _midspread_n % 2
         ELSE _midspread_n - 2 * CAST(floor(share * _midspread_n) AS BIGINT) END AS n_kept,
    _midspread_e[_midspread_at + 1] AS trimmed_mean,
    _midspread_e[_midspread_at + 2] AS se,
    _midspread_e[_midspread_at + 3] AS winsorized_mean
FROM _midspread_steps ORDER BY {joined(grouped)}share"""
