"""`power_ladder`: the shape of the values on each rung of the ladder of powers."""

from typing import Any, Final

import numpy as np

from midspread.udfs.declaring import NULL, Parameter, Values, helper, table_function
from midspread.udfs.drivers import watching_ranked_driver
from midspread.udfs.reexpression.ladder_figures import FIGURES, ladder_figures
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

LOWEST: Final = -10.0
HIGHEST: Final = 10.0

_RUNG_FIELDS: Final = ("power", *FIGURES, "best")
_RUNG_TYPES: Final = {"n": "BIGINT", "n_lost": "BIGINT", "best": "BOOLEAN"}
_COLUMNS: Final = ", ".join(f"{name} {_RUNG_TYPES.get(name, 'DOUBLE')}" for name in _RUNG_FIELDS)
_SHOWN: Final = (*_RUNG_FIELDS, "expression")


@helper("_power_ladder", f"STRUCT({_COLUMNS})[]")
def rungs_of_groups(work: Any, lists: Any, powers: Any) -> Any:
    """A list of rungs for each list of values; the powers are the same for all."""
    import pyarrow as pa

    from midspread.udfs.binding.arrow_columns import arrow_view, numpy_view, single_chunk
    from midspread.udfs.binding.batches import records
    from midspread.udfs.binding.computing import groups_of
    from midspread.udfs.grouped import Task, row_numbers, run

    groups = groups_of(lists)
    count = len(groups.offsets) - 1
    steps = numpy_view(single_chunk(powers).values)[: len(single_chunk(powers)[0])]
    steps = np.ascontiguousarray(steps, dtype=np.float64)
    out = np.full((count, len(FIGURES) * steps.size), NULL)
    loop = watching_ranked_driver("power_ladder", ladder_figures)
    task = Task(loop, steps[np.newaxis, :], 1, 0)
    run(groups, [task], out, row_numbers(np.ones(count, np.int64)), work.control, work.threads)
    by_rung = out.reshape(count, steps.size, len(FIGURES))
    by_rung[groups.lengths == 0, :, :2] = 0.0
    flat = by_rung.reshape(-1, len(FIGURES))
    found: dict[str, Values] = {name: flat[:, place] for place, name in enumerate(FIGURES)}
    found["power"] = np.tile(steps, count)
    found["best"] = best_rungs(by_rung, steps).astype(np.float64).reshape(-1)
    rungs = records(_RUNG_FIELDS, _RUNG_TYPES, found, np.zeros(flat.shape[0], dtype=np.bool_))
    offsets = np.arange(count + 1, dtype=np.int32) * steps.size
    return pa.ListArray.from_arrays(arrow_view(offsets), rungs)


def best_rungs(by_rung: Values, powers: Values) -> Any:
    """Which rung of each group is best: groups × rungs of booleans, at most one true a group.

    The smallest absolute medcouple of those that lose no row; of equal ones the nearest to 1.
    """
    order = np.lexsort((-powers, np.abs(powers - 1.0)))
    skew = np.abs(by_rung[:, order, FIGURES.index("medcouple")])
    skew[(by_rung[:, order, FIGURES.index("n_lost")] > 0) | np.isnan(skew)] = np.inf
    first = np.argmin(skew, axis=1)
    found = np.zeros(by_rung.shape[:2], dtype=np.bool_)
    known = np.flatnonzero(np.isfinite(skew.min(axis=1)))
    found[known, order[first[known]]] = True
    return found


def rung_expression(name: str, power: float) -> str:
    """A rung in SQL that any engine reads; the name comes quoted."""
    if power == 1.0:
        return name
    if power == 0.0:
        return f"ln({name})"
    sign = "-" if power < 0.0 else ""
    return f"{sign}power({name}, {power!r})".replace(".0)", ")")


@table_function(
    columns=("tbl", "value"),
    parameters=(
        BY,
        Parameter(
            "powers", "rungs to stand on, each from -10 to 10", "[-2, -1, -0.5, 0, 0.5, 1, 2, 3]"
        ),
    ),
    fields=_SHOWN,
    formula=(
        "of the values of rung(x, power): skewness m₃ / m₂^(3/2), m_k the central moments with "
        "divisor n; bowley_skew; medcouple; Pearson's correlation of the sorted values with Φ⁻¹ of "
        "Filliben's medians (i − 0.3175) / (n + 0.365), 0.5^(1/n) for the last"
    ),
    source="Tukey 1977, Exploratory Data Analysis; Filliben 1975, Technometrics 17, 111–117",
    breakdown="0.25 for bowley_skew, medcouple and best; 0 for skewness and normal_plot_corr",
    cost="O(n log n) time, one sort a group",
    example="SELECT * FROM power_ladder('visits', 'dwell_s', by := 'route')",
)
def power_ladder(*, tbl: object, value: object, by: object, powers: object) -> str:
    """On which rung of the ladder of powers the values of each group are symmetric.

    One row for each group and rung, ordered by the keys and the power. n counts the values that
    the rung takes, n_lost those it cannot (below 0, and 0 itself for powers from 0 down). best is
    true for the smallest absolute medcouple among rungs that lose no value; of equal ones, the
    nearest to 1. expression is the rung in plain SQL, to paste into a query of any engine.

    Parameters
    ----------
    tbl : text
        A table, view, CTE, file, glob, or a query in parentheses.
    value : text
        The column of measurements; any numeric type.
    by : list of text or text
        Columns whose values make the groups.
    powers : list of numbers
        Each from -10 to 10; 0 stands for the logarithm.

    Notes
    -----
    The medcouple decides because one percent of wild values drags skewness, the plot correlation
    and the likelihood a whole rung, but not the medcouple. Figures are NULL where all values of a
    rung are equal (no rung is best then), NaN where a value is NaN; skewness and normal_plot_corr
    also where one is infinite. Every rung keeps the order of the values. The best rung of a small
    group is a guess: look at its neighbours, and use one rung for all groups to be compared.

    References
    ----------
    Tukey, J. W. (1977). Exploratory Data Analysis. Addison-Wesley, chapter 3.
    Filliben, J. J. (1975). Technometrics 17, 111–117.
    """
    function = "power_ladder"
    grouped = [quoted_name(name) for name in keys(function, by, _SHOWN)]
    steps = sorted(
        {step + 0.0 for step in number_list(function, "powers", powers, LOWEST, HIGHEST)}
    )
    measured = column(function, "value", value)
    collected = f"_numbers({measured}, {quoted_text(function)}, {quoted_text(str(value))})"
    listed = ", ".join(f"{step!r}::DOUBLE" for step in steps)
    written = " ".join(
        f"WHEN {step!r}::DOUBLE THEN {quoted_text(rung_expression(measured, step))}"
        for step in steps
    )
    group = f"GROUP BY {', '.join(grouped)}" if grouped else ""
    figures = ", ".join(f"_midspread_r.{name} AS {name}" for name in _RUNG_FIELDS)
    return f"""
WITH _midspread_source AS (SELECT * FROM {relation(function, tbl)}),
_midspread_groups AS (
    SELECT {joined(grouped)}count({measured}) AS _midspread_n,
        unnest(_power_ladder({collected}, [{listed}])) AS _midspread_r
    FROM _midspread_source {group}
)
SELECT {joined(grouped)}{figures}, CASE _midspread_r.power {written} END AS expression
FROM _midspread_groups ORDER BY {joined(grouped)}power"""
