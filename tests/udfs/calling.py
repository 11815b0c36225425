"""Calls of every aggregate of the catalogue, and their answers as plain numbers.

Tests that walk `AGGREGATES` meet a new function without being told.
"""

import math
from collections.abc import Iterable, Sequence
from typing import Any, Final

import duckdb
import pyarrow as pa

from midspread.udfs import Function, Parameter, functions

AGGREGATES: Final = tuple(f for f in functions().values() if f.kind == "aggregate")
NAMES: Final = tuple(f.name for f in AGGREGATES)

Group = Sequence[float | None]

_FIELD_FAMILIES: Final = {
    # Records mix families; fields that are not named here must not change with the unit.
    **dict.fromkeys(("lower", "upper", "mid", "l1"), "location"),
    **dict.fromkeys(("spread", "l2"), "scale"),
}

_LINE_FAMILIES: Final = {"slope": "slope", "lower": "slope", "upper": "slope", "intercept": "level"}


def value_for(parameter: Parameter) -> float:
    """The default, or a value well inside the range where one must be given."""
    if isinstance(parameter.default, int | float):
        return float(parameter.default)
    return parameter.low + 0.3 * (parameter.high - parameter.low)


def columns_of(function: Function) -> tuple[str, ...]:
    """The columns of the test tables that a function is given: of two, weights or other values."""
    second = "w" if "w" in function.columns else "v"
    return ("x", second)[: len(function.columns)]


def call(function: Function, columns: Sequence[str] | None = None, **parameters: object) -> str:
    """A call in SQL; parameters are SQL texts, those not given are left out where they may be."""
    given = [*(columns or columns_of(function))]
    for parameter in function.parameters:
        if parameter.name in parameters:
            given.append(f"{parameter.name} := {parameters[parameter.name]}")
        elif parameter.default is None:
            given.append(f"{parameter.name} := {value_for(parameter)!r}")
    return f"{function.name}({', '.join(given)})"


def partners(group: Group) -> list[float]:
    """A second value for each: loosely related to where it stands among the distinct values."""
    places = {x: i for i, x in enumerate(sorted({x for x in group if x is not None}))}
    return [0.0 if x is None else float(places[x] + places[x] * 37 % 11) for x in group]


def table(groups: Sequence[Group], seconds: Sequence[Group] | None = None) -> pa.Table:
    """Columns g, x, w, v; a group of no values has one row of NULL.

    The second values stand in w as weights and in v as measurements; where they are not given,
    all weights are 1 and the measurements are `partners`.
    """
    rows: list[tuple[int, float | None, float | None, float | None]] = []
    for g, group in enumerate(groups):
        weights = seconds[g] if seconds else [1.0] * len(group)
        values = seconds[g] if seconds else partners(group)
        rows += [(g, *row) for row in zip(group, weights, values, strict=True)] or [
            (g, None, None, None)
        ]
    kinds = {"g": pa.int64(), "x": pa.float64(), "w": pa.float64(), "v": pa.float64()}
    return pa.table(
        {
            name: pa.array([row[i] for row in rows], kind)
            for i, (name, kind) in enumerate(kinds.items())
        }
    )


def answers(
    connection: duckdb.DuckDBPyConnection,
    function: Function,
    groups: Sequence[Group],
    seconds: Sequence[Group] | None = None,
    **parameters: object,
) -> list[Any]:
    """The answers of one function for each group, all from one grouped query."""
    return [row[0] for row in rows(connection, [function], groups, seconds, **parameters)]


def rows(
    connection: duckdb.DuckDBPyConnection,
    chosen: Iterable[Function],
    groups: Sequence[Group],
    seconds: Sequence[Group] | None = None,
    **parameters: object,
) -> list[tuple[Any, ...]]:
    """One row a group with the answer of each function."""
    calls = ", ".join(call(function, **parameters) for function in chosen)
    connection.register("given_groups", table(groups, seconds))
    try:
        return connection.execute(
            f"SELECT {calls} FROM given_groups GROUP BY g ORDER BY g"
        ).fetchall()
    finally:
        connection.unregister("given_groups")


def figures(function: Function, answer: Any) -> list[tuple[str, float | None]]:
    """The numbers of an answer, each with its family: location, scale, slope, level or shape.

    A slope changes with the unit of the first column, a level (where a line meets the axis) with
    its origin too; correlations count as shapes.
    """
    if not function.fields:
        families = {"weighted": "location", "association": "shape"}
        return [(families.get(function.family, function.family), answer)]
    if answer is None:
        return [("shape", None)]
    records = answer if isinstance(answer, list) else [answer]
    known = _LINE_FAMILIES if "slope" in function.fields else _FIELD_FAMILIES
    if function.family == "re-expression":
        known = {}
    return [
        (known.get(name, "shape"), record[name])
        for record in records
        for name in function.fields
        if name not in function.labels
    ]


def bits(answer: Any) -> Any:
    """An answer in a form that compares bit by bit, NaN equal to NaN."""
    if isinstance(answer, float):
        return "nan" if math.isnan(answer) else answer.hex()
    if isinstance(answer, dict):
        return {name: bits(value) for name, value in answer.items()}
    if isinstance(answer, list | tuple):
        return [bits(value) for value in answer]
    return answer
