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


def value_for(parameter: Parameter) -> float:
    """The default, or a value well inside the range where one must be given."""
    if isinstance(parameter.default, int | float):
        return float(parameter.default)
    return parameter.low + 0.3 * (parameter.high - parameter.low)


def call(function: Function, columns: Sequence[str] | None = None, **parameters: object) -> str:
    """A call in SQL; parameters are SQL texts, those not given are left out where they may be."""
    given = [*(columns or function.columns)]
    for parameter in function.parameters:
        if parameter.name in parameters:
            given.append(f"{parameter.name} := {parameters[parameter.name]}")
        elif parameter.default is None:
            given.append(f"{parameter.name} := {value_for(parameter)!r}")
    return f"{function.name}({', '.join(given)})"


def table(groups: Sequence[Group], weights: Sequence[Group] | None = None) -> pa.Table:
    """Columns g, x, w; a group of no values has one row of NULL; weights are 1 if not given."""
    rows: list[tuple[int, float | None, float | None]] = []
    for g, group in enumerate(groups):
        own = weights[g] if weights else [1.0] * len(group)
        rows += [(g, x, w) for x, w in zip(group, own, strict=True)] or [(g, None, None)]
    numbers = pa.float64()
    return pa.table(
        {
            "g": pa.array([row[0] for row in rows], pa.int64()),
            "x": pa.array([row[1] for row in rows], numbers),
            "w": pa.array([row[2] for row in rows], numbers),
        }
    )


def answers(
    connection: duckdb.DuckDBPyConnection,
    function: Function,
    groups: Sequence[Group],
    weights: Sequence[Group] | None = None,
    **parameters: object,
) -> list[Any]:
    """The answers of one function for each group, all from one grouped query."""
    return [row[0] for row in rows(connection, [function], groups, weights, **parameters)]


def rows(
    connection: duckdb.DuckDBPyConnection,
    chosen: Iterable[Function],
    groups: Sequence[Group],
    weights: Sequence[Group] | None = None,
    **parameters: object,
) -> list[tuple[Any, ...]]:
    """One row a group with the answer of each function."""
    calls = ", ".join(call(function, **parameters) for function in chosen)
    connection.register("given_groups", table(groups, weights))
    try:
        return connection.execute(
            f"SELECT {calls} FROM given_groups GROUP BY g ORDER BY g"
        ).fetchall()
    finally:
        connection.unregister("given_groups")


def figures(function: Function, answer: Any) -> list[tuple[str, float | None]]:
    """The numbers of an answer, each with its family: location, scale or shape."""
    if not function.fields:
        family = "location" if function.family == "weighted" else function.family
        return [(family, answer)]
    if answer is None:
        return [("shape", None)]
    records = answer if isinstance(answer, list) else [answer]
    return [
        (_FIELD_FAMILIES.get(name, "shape"), record[name])
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
