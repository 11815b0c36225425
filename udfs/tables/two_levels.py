"""What the table functions that ask whether a difference of two levels holds share."""

from typing import Final

from midspread.udfs.declaring import Parameter, ParameterError
from midspread.udfs.resampling.statistics import read_statistic
from midspread.udfs.tables.comparing import LEVEL, is_level, known_baseline
from midspread.udfs.tables.relations import column, joined, quoted_text, relation

BASELINE: Final = Parameter(
    "baseline",
    "the level that is subtracted; NULL for the smaller one",
    "NULL",
    kind="level",
)


def computed_by_group(
    function: str,
    tbl: object,
    value: object,
    label: object,
    grouped: list[str],
    baseline: object,
    computation: str,
) -> str:
    """WITH … up to `_midspread_pairs`: keys, baseline, other, _m_note and the answer _m.

    Parameters
    ----------
    grouped : list of str
        Quoted names of the keys.
    computation : str
        A call of an Arrow function with {} for the lists of values, the baseline's first. Where
        _m_note is not NULL its answer is of no use.
    """
    measured = column(function, "value", value)
    collected = f"_numbers({measured}, {quoted_text(function)}, {quoted_text(str(value))})"
    labelled = column(function, "label", label)
    group = f"GROUP BY {', '.join(grouped)}" if grouped else ""
    marked = "false" if baseline is None else is_level(function, baseline)
    known = known_baseline(function, label, baseline)
    order = f"_m_baseline DESC, {LEVEL}"
    lacks = "false" if baseline is None else "NOT _m_has_baseline"
    computed = computation.format(f"list(_m_values ORDER BY {order})")
    return f"""
WITH _midspread_source AS (SELECT * FROM {relation(function, tbl)}),
_midspread_levels AS (
    SELECT {joined(grouped)}{labelled} AS {LEVEL}, count({measured}) AS _m_n,
        {collected} AS _m_values
    FROM _midspread_source WHERE {labelled} IS NOT NULL
    GROUP BY {joined(grouped)}{labelled} HAVING _m_n > 0
),
_midspread_marked AS (SELECT *, {marked} AS _m_baseline FROM _midspread_levels),
_midspread_groups AS (
    SELECT {joined(grouped)}list({LEVEL} ORDER BY {order}) AS _m_levels,
        list(_m_n ORDER BY {order}) AS _m_counts, bool_or(_m_baseline) AS _m_has_baseline,
        {computed} AS _m
    FROM _midspread_marked {group}
),
_midspread_pairs AS (
    SELECT {joined(grouped)}{known.format(f"CASE WHEN NOT {lacks} THEN _m_levels[1] END")}
            AS baseline,
        CASE WHEN {lacks} THEN _m_levels[1] ELSE _m_levels[2] END AS other,
        CASE WHEN {lacks} THEN 0 ELSE _m_counts[1] END AS n_baseline,
        CASE WHEN {lacks} THEN list_sum(_m_counts) ELSE coalesce(_m_counts[2], 0) END::BIGINT
            AS n_other,
        CASE WHEN {lacks} THEN 'the baseline has no values in this group'
            WHEN len(_m_levels) = 1 THEN 'one level alone, so there is nothing to compare'
        END AS _m_note,
        _m
    FROM _midspread_groups WHERE len(_m_levels) > 0
)"""


def share_of(function: str, argument: str, statistic: object) -> float:
    """The share that makes a trimmed mean of a statistic: 0 for the mean, 0.5 for the median."""
    if isinstance(statistic, str):
        try:
            found = read_statistic(function, statistic)
        except ParameterError as error:
            if statistic.strip().lower().startswith("trimmed_mean"):
                raise ParameterError(str(error).replace("statistic", argument, 1)) from None
        else:
            if found.function.name == "trimmed_mean":
                return found.parameters[0]
    shown = f"'{statistic}'" if isinstance(statistic, str) else repr(statistic)
    raise ParameterError(
        f"{function}: {argument} must be mean, median or trimmed_mean(share), got {shown}; "
        f"write for example 'trimmed_mean(0.2)'."
    )
