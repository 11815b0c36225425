"""`bootstrap_draws`: the drawn values behind a bootstrap interval."""

from typing import TYPE_CHECKING, Any, Final

import numpy as np

from midspread.udfs.declaring import helper, table_function
from midspread.udfs.resampling.parameters import RESAMPLES
from midspread.udfs.resampling.randomness import SEED
from midspread.udfs.resampling.statistics import STATISTIC, read_statistic
from midspread.udfs.tables.relations import (
    BY,
    column,
    joined,
    keys,
    quoted_name,
    quoted_text,
    relation,
    whole,
)

if TYPE_CHECKING:
    from midspread.udfs.binding.computing import Work

_FIELDS: Final = ("resample", "value")


@helper("_bootstrap_draws", "DOUBLE[]")
def drawn_lists(work: "Work", lists: Any, texts: Any, resamples: Any, seeds: Any) -> Any:
    """The draws of each group, in the order of the resamples; none for less than two values.

    Statistic, resamples and seed are the same for all groups.
    """
    import pyarrow as pa

    from midspread.udfs.binding.arrow_columns import arrow_view, numbers_or_null, single_chunk
    from midspread.udfs.binding.computing import groups_of
    from midspread.udfs.resampling.draws import group_draws

    groups = groups_of(lists)
    lengths = groups.lengths
    if lengths.size == 0:
        return pa.array([], pa.list_(pa.float64()))
    statistic = read_statistic("bootstrap_draws", single_chunk(texts)[0].as_py())
    number = int(single_chunk(resamples)[0].as_py())
    seed = np.full(lengths.size, float(single_chunk(seeds)[0].as_py()))
    draws = group_draws(groups, statistic, number, seed, work)
    kept = lengths >= 2
    ends = np.zeros(lengths.size + 1, dtype=np.int32)
    np.cumsum(np.where(kept, number, 0), out=ends[1:])
    return pa.ListArray.from_arrays(arrow_view(ends), numbers_or_null(draws[kept].reshape(-1)))


@table_function(
    columns=("tbl", "value"),
    parameters=(BY, STATISTIC, RESAMPLES, SEED),
    fields=_FIELDS,
    formula=(
        "the statistic of each resample: n values drawn with replacement from the n of the group"
    ),
    source="Efron 1979, Ann. Statist. 7, 1–26",
    breakdown="the statistic's own",
    cost="as bootstrap_interval; groups · resamples rows",
    version=2,
    example=(
        "SELECT * FROM bootstrap_draws('visits', 'dwell_s', statistic := 'median', resamples := 9)"
    ),
)
def bootstrap_draws(
    *, tbl: object, value: object, by: object, statistic: object, resamples: object, seed: object
) -> str:
    """The values a statistic takes on resamples of each group, for plots and further SQL.

    One row for each group and resample, ordered by the keys and the number of the resample. They
    are the draws that ``bootstrap_interval`` with the same statistic, resamples and seed turns
    into limits; and the first draws are the same whatever the number of resamples.

    Parameters
    ----------
    tbl : text
        A table, view, CTE, file, glob, or a query in parentheses.
    value : text
        The column of measurements; any numeric type. NULL is left out.
    by : list of text or text
        Columns whose values make the groups; none for one group.
    statistic : text
        A one-column function with a single number as result: 'median', 'trimmed_mean(0.1)'.
    resamples : int
        How many samples are drawn from each group, 1 to 1,000,000.
    seed : int
        Chooses the random numbers.

    Notes
    -----
    Groups of less than two values have no draws. value is NULL where a resample has no value, as
    where the scale of a resample is 0, and NaN for groups that hold NaN.

    The draws say how the estimate varies from sample to sample, not how single values do. Draws
    of two groups are independent unless the groups hold the same values.

    References
    ----------
    Efron, B. (1979). Ann. Statist. 7, 1–26.
    """
    function = "bootstrap_draws"
    grouped = [quoted_name(name) for name in keys(function, by, _FIELDS)]
    measured = column(function, "value", value)
    collected = f"_numbers({measured}, {quoted_text(function)}, {quoted_text(str(value))})"
    chosen = read_statistic(function, STATISTIC.check_text(function, statistic))
    number, chance = whole(function, RESAMPLES, resamples), whole(function, SEED, seed)
    group = f"GROUP BY {', '.join(grouped)}" if grouped else ""
    return f"""
WITH _midspread_source AS (SELECT * FROM {relation(function, tbl)}),
_midspread_groups AS (
    SELECT {joined(grouped)}count({measured}) AS _m_n, _bootstrap_draws({collected},
        {quoted_text(chosen.text)}, {number}, {chance}) AS _m_draws
    FROM _midspread_source {group}
)
SELECT {joined(grouped)}generate_subscripts(_m_draws, 1) AS resample, unnest(_m_draws) AS value
FROM _midspread_groups ORDER BY {joined(grouped)}resample"""
