"""`held_out_errors`: which summary of a group predicts values it has not seen."""

from typing import Final

from midspread.udfs.declaring import Parameter, ParameterError, table_function
from midspread.udfs.resampling.fold import FOLDS
from midspread.udfs.resampling.held_out import FIGURES
from midspread.udfs.resampling.randomness import SEED
from midspread.udfs.resampling.statistics import read_statistic
from midspread.udfs.tables.relations import (
    BY,
    UNIT,
    column,
    joined,
    keys,
    null_unit,
    quoted_name,
    quoted_text,
    relation,
    whole,
)

_FIELDS: Final = ("statistic", "n", "folds", *FIGURES)


@table_function(
    columns=("tbl", "value"),
    parameters=(
        BY,
        Parameter(
            "statistics",
            "summaries to compare, each a one-column function with its parameters",
            "['mean', 'median', 'trimmed_mean(0.2)']",
        ),
        FOLDS,
        UNIT,
        SEED,
    ),
    fields=_FIELDS,
    formula=(
        "for each fold the statistic of the values outside it, e; mean_absolute_error = mean of "
        "abs(x − e) and root_mean_squared_error = √ mean of (x − e)², over all values x, each "
        "with the e of its own fold"
    ),
    source="Stone 1974, J. R. Statist. Soc. B 36, 111–147; Geisser 1975, JASA 70, 320–328",
    breakdown="each statistic's own; the errors themselves break down at 0",
    cost="O(folds · n) time after one sort a group, O(n) memory",
    example="SELECT * FROM held_out_errors('visits', 'dwell_s', by := 'route', folds := 5)",
)
def held_out_errors(
    *,
    tbl: object,
    value: object,
    by: object,
    statistics: object,
    folds: object,
    unit: object,
    seed: object,
) -> str:
    """How well summaries of each group predict values left out, and how much they move.

    One row for each group and statistic, ordered by the keys and as the statistics are listed.
    The values of a group are dealt into folds; each fold in turn is left out and predicted by the
    statistic of the rest. estimate is the statistic of all values, lowest and highest are its
    extremes over the folds left out: far apart, a few values decide it.

    Parameters
    ----------
    tbl : text
        A table, view, CTE, file, glob, or a query in parentheses.
    value : text
        The column of measurements; any numeric type. Rows where it is NULL are left out.
    by : list of text or text
        Columns whose values make the groups; none for one group.
    statistics : list of text or text
        Any one-column functions with a single number as result, such as 'median',
        'trimmed_mean(0.1)' or 'huber_location'.
    folds : int
        How many parts, 2 to 1,000,000.
    unit : text
        A column such as a vehicle or a day whose rows are left out together; NULL in it is
        refused.
    seed : int
        Another one deals anew.

    Notes
    -----
    Each error favours its own summary: the absolute error the median, the squared error the mean.
    A trimmed mean that is nearly as good under both is the quieter choice. Compare statistics of
    location with one another; for statistics of scale or shape only lowest and highest mean
    anything.

    Without unit, folds are as equal in size as can be, and a group with fewer values than folds
    has a fold for each value; which value falls into which fold depends on seed and the group's
    values alone, never on the order of rows. With unit, a row's fold is ``fold(unit, folds,
    seed)``: whole units are left out, and few units may leave a fold empty. The column folds
    counts those that hold values.

    Rows that are not independent, such as visits of one vehicle on one day, make the errors too
    small unless they are left out together.

    With fewer than two values, or all of them in one fold, lowest, highest and the errors are
    NULL; so they are where a rest is too small for the statistic. NaN among the values makes
    all figures NaN. Choosing the summary by these errors and reporting the winner's error makes
    that error a little too good.

    References
    ----------
    Stone, M. (1974). J. R. Statist. Soc. B 36, 111–147.
    Geisser, S. (1975). JASA 70, 320–328.
    """
    function = "held_out_errors"
    grouped = [quoted_name(name) for name in keys(function, by, _FIELDS)]
    listed = statistic_texts(function, statistics)
    number, chance = whole(function, FOLDS, folds), whole(function, SEED, seed)
    measured = column(function, "value", value)
    collected = f"_numbers({measured}, {quoted_text(function)}, {quoted_text(str(value))})"
    own_folds = "NULL"
    if unit is not None:
        key = column(function, "unit", unit)
        sentence = quoted_text(null_unit(function, str(unit)))
        own_folds = (
            f"list(CASE WHEN {key} IS NULL AND {measured} IS NOT NULL THEN error({sentence}) "
            f"ELSE fold({key}, {number}, {chance}) - 1 END) FILTER ({measured} IS NOT NULL)"
        )
    order = f"ORDER BY {joined(grouped)}_m_at"
    group = f"GROUP BY {', '.join(grouped)}" if grouped else ""
    figures = ", ".join(f'_m_e."{name}"' for name in _FIELDS)
    return f"""
WITH _midspread_source AS (SELECT * FROM {relation(function, tbl)}),
_midspread_groups AS (
    SELECT {joined(grouped)}count({measured}) AS _m_n, _held_out_errors({collected}, {own_folds},
        [{", ".join(map(quoted_text, listed))}], {number}, {chance}) AS _m_errors
    FROM _midspread_source {group}
),
_midspread_figures AS (
    SELECT {joined(grouped)}unnest(_m_errors) AS _m_e,
        generate_subscripts(_m_errors, 1) AS _m_at
    FROM _midspread_groups
)
SELECT {joined(grouped)}{figures} FROM _midspread_figures {order}"""


def statistic_texts(function: str, given: object) -> list[str]:
    """Statistics given as a list of texts or as one; each is read once, so that errors come now."""
    listed = [given] if isinstance(given, str) else given
    if not isinstance(listed, list) or not listed or not all(isinstance(t, str) for t in listed):
        raise ParameterError(
            f"{function}: statistics must be a list of texts, at least one, got {given!r}; "
            f"write for example statistics := ['mean', 'median']."
        )
    for text in listed:
        read_statistic(function, text)
    return listed
