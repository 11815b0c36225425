"""`straightening_pairs`: on which pair of rungs a curved relation becomes straight."""

from typing import Any, Final

import numpy as np

from midspread.udfs.declaring import NULL, Parameter, Values, helper, table_function
from midspread.udfs.drivers import watching_pairs_driver
from midspread.udfs.reexpression.straightening import FIGURES, straightening
from midspread.udfs.tables.power_ladder import HIGHEST, LOWEST, rung_expression
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

_PAIR_FIELDS: Final = ("y_power", "x_power", *FIGURES, "straightest")
_PAIR_TYPES: Final = {"n": "BIGINT", "n_lost": "BIGINT", "straightest": "BOOLEAN"}
_COLUMNS: Final = ", ".join(f"{name} {_PAIR_TYPES.get(name, 'DOUBLE')}" for name in _PAIR_FIELDS)
_SHOWN: Final = (*_PAIR_FIELDS, "y_expression", "x_expression")


@helper("_straightening_pairs", f"STRUCT({_COLUMNS})[]")
def pairs_of_groups(work: Any, y_lists: Any, x_lists: Any, powers: Any) -> Any:
    """A list of pairs of rungs for each group of rows; the powers are the same for all."""
    import pyarrow as pa

    from midspread.udfs.binding.arrow_columns import arrow_view, numpy_view, single_chunk
    from midspread.udfs.binding.batches import records
    from midspread.udfs.binding.computing import groups_of
    from midspread.udfs.grouped import Task, row_numbers, run

    groups = groups_of(y_lists, x_lists)
    count = len(groups.offsets) - 1
    listed = single_chunk(powers)
    steps = np.array(numpy_view(listed.values)[: len(listed[0])], dtype=np.float64)
    pairs = steps.size**2
    out = np.full((count, len(FIGURES) * pairs), NULL)
    loop = watching_pairs_driver("straightening", straightening)
    task = Task(loop, steps[np.newaxis, :], 1, 0)
    run(groups, [task], out, row_numbers(np.ones(count, np.int64)), work.control, work.threads)
    by_pair = out.reshape(count, pairs, len(FIGURES))
    by_pair[groups.lengths == 0, :, :2] = 0.0
    flat = by_pair.reshape(-1, len(FIGURES))
    found: dict[str, Values] = {name: flat[:, place] for place, name in enumerate(FIGURES)}
    found["y_power"] = np.tile(np.repeat(steps, steps.size), count)
    found["x_power"] = np.tile(steps, count * steps.size)
    found["straightest"] = straightest(by_pair, steps).astype(np.float64).reshape(-1)
    rows = records(_PAIR_FIELDS, _PAIR_TYPES, found, np.zeros(flat.shape[0], dtype=np.bool_))
    offsets = np.arange(count + 1, dtype=np.int32) * pairs
    return pa.ListArray.from_arrays(arrow_view(offsets), rows)


def straightest(by_pair: Values, steps: Values) -> Any:
    """Which pair of each group is straightest: groups × pairs of booleans, at most one true.

    The ratio nearest to 1, by its logarithm, of the pairs that lose no row; of equal ones the
    pair nearest to leaving both columns as they are.
    """
    away = np.abs(steps - 1.0)
    order = np.argsort((away[:, np.newaxis] + away[np.newaxis, :]).reshape(-1), kind="stable")
    ratio = by_pair[:, order, FIGURES.index("half_slope_ratio")]
    lost = by_pair[:, order, FIGURES.index("n_lost")] > 0
    with np.errstate(all="ignore"):
        bend = np.abs(np.log(ratio))
    bend[lost | ~np.isfinite(bend)] = np.inf
    first = np.argmin(bend, axis=1)
    found = np.zeros(by_pair.shape[:2], dtype=np.bool_)
    known = np.flatnonzero(np.isfinite(bend.min(axis=1)))
    found[known, order[first[known]]] = True
    return found


@table_function(
    columns=("tbl", "y", "x"),
    parameters=(
        BY,
        Parameter(
            "powers", "rungs for both columns, each from -10 to 10", "[-1, -0.5, 0, 0.5, 1, 2]"
        ),
    ),
    fields=_SHOWN,
    formula=(
        "of rung(y, y_power) and rung(x, x_power): half_slope_ratio of the three-group resistant "
        "line; Pearson's correlation of the values winsorized column by column, share 0.2"
    ),
    source=(
        "Tukey 1977, Exploratory Data Analysis; Velleman & Hoaglin 1981, Applications, Basics, "
        "and Computing of Exploratory Data Analysis; Wilcox 2017"
    ),
    breakdown="about 1/6 for half_slope_ratio and straightest, 0.2 for winsorized_corr",
    cost="O(n log n) time, two sorts a group; O(n · powers) memory",
    example="SELECT * FROM straightening_pairs('visits', 'dwell_s', 'boardings')",
)
def straightening_pairs(*, tbl: object, y: object, x: object, by: object, powers: object) -> str:
    """On which pair of rungs a curved relation of two columns becomes straight.

    One row for each group and pair of rungs, ordered by the keys, y_power and x_power. A
    half_slope_ratio of 1 is straight; above 1 the relation grows steeper to the right, between 0
    and 1 flatter, and a negative one turns back, which no rung straightens. n_lost counts the
    rows that one of the two rungs does not take. straightest is true for the ratio nearest to 1,
    by its logarithm, among pairs that lose no row; of equal ones, for the pair nearest to leaving
    both columns as they are. The expressions are plain SQL, to paste into a query of any engine.

    Parameters
    ----------
    tbl : text
        A table, view, CTE, file, glob, or a query in parentheses.
    y, x : text
        The two columns; any numeric type. Rows that lack one are left out.
    by : list of text or text
        Columns whose values make the groups.
    powers : list of numbers
        Each from -10 to 10; 0 stands for the logarithm.

    Notes
    -----
    Several pairs are often about as straight: prefer the one whose meaning you can say, and
    re-express the column with the wider range of ratios first. half_slope_ratio is NULL where a
    third is empty or a half slope is undefined or the left one is 0; figures are NULL for fewer
    than 3 rows, NaN where a value is NaN. Rank correlations are the same on every pair, so they
    cannot choose. A ratio chosen as the best of many looks better than it is.

    References
    ----------
    Tukey, J. W. (1977). Exploratory Data Analysis. Addison-Wesley, chapters 5 and 6.
    Velleman, P. F. & Hoaglin, D. C. (1981). Applications, Basics, and Computing of Exploratory
    Data Analysis. Duxbury Press.
    """
    function = "straightening_pairs"
    grouped = [quoted_name(name) for name in keys(function, by, _SHOWN)]
    given = number_list(function, "powers", powers, LOWEST, HIGHEST)
    steps = sorted({step + 0.0 for step in given})
    columns = {"y": column(function, "y", y), "x": column(function, "x", x)}
    counted = ", ".join(f"count({name})" for name in columns.values())
    both = " AND ".join(f"{name} IS NOT NULL" for name in columns.values())
    collected = ", ".join(
        f"_numbers(CASE WHEN {both} THEN {name} END, {quoted_text(function)}, "
        f"{quoted_text(argument)})"
        for argument, name in columns.items()
    )
    listed = ", ".join(f"{step!r}::DOUBLE" for step in steps)
    expressions = ", ".join(
        f"CASE _midspread_r.{argument}_power "
        + " ".join(
            f"WHEN {step!r}::DOUBLE THEN {quoted_text(rung_expression(name, step))}"
            for step in steps
        )
        + f" END AS {argument}_expression"
        for argument, name in columns.items()
    )
    group = f"GROUP BY {', '.join(grouped)}" if grouped else ""
    figures = ", ".join(f"_midspread_r.{name} AS {name}" for name in _PAIR_FIELDS)
    return f"""
WITH _midspread_source AS (SELECT * FROM {relation(function, tbl)}),
_midspread_groups AS (
    SELECT {joined(grouped)}[{counted}] AS _midspread_n,
        unnest(_straightening_pairs({collected}, [{listed}])) AS _midspread_r
    FROM _midspread_source {group}
)
SELECT {joined(grouped)}{figures}, {expressions}
FROM _midspread_groups ORDER BY {joined(grouped)}y_power, x_power"""
