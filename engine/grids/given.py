"""Values as they were given to `enter`: checked, typed, and put beside the store to be written."""

from collections.abc import Sequence
from typing import Final

import duckdb

from midspread.engine.errors import MidspreadError, UsageError
from midspread.engine.grids import ledger
from midspread.engine.grids.model import Column, ColumnKind, Grid
from midspread.engine.grids.tables import key_text
from midspread.engine.nearest import did_you_mean, nearest
from midspread.engine.store.quoting import quoted

GIVEN: Final = "temp.main._m_given"
"""The table of the values, each in its column's type."""
KEY: Final = "_m_key"
"""Its column that holds each row's key as text."""


def columns_given(grid: Grid, names: Sequence[str]) -> list[Column]:
    """The columns that are given, when they may be typed in and the key is among them."""
    chosen: list[Column] = []
    keys = {key.casefold() for key in grid.keys}
    for name in names:
        column = grid.column(name)
        if column is None:
            meant = nearest(name, [c.name for c in grid.columns])
            hint = did_you_mean(meant, f"it has {_listed(grid.columns)}.")
            raise MidspreadError(f"enter: {grid.name} has no column {name}; {hint}")
        if column in chosen:
            raise UsageError(f"enter: {column.name} is given twice; give it once.")
        if column.kind is not ColumnKind.ENTERED and column.name.casefold() not in keys:
            source = "the query" if column.kind is ColumnKind.DERIVED else f"({column.expression})"
            raise MidspreadError(
                f"enter: {column.name} of {grid.name} is computed by {source} and cannot be typed "
                f"in; those that can are {_listed(grid.of_kind(ColumnKind.ENTERED))}."
            )
        chosen.append(column)
    missing = [key for key in grid.keys if grid.column(key) not in chosen]
    if missing:
        raise UsageError(
            f"enter: {grid.name} finds its rows by {', '.join(grid.keys)}, and {missing[0]} is not "
            f"given; add {missing[0]}=…."
        )
    return chosen


def _listed(columns: Sequence[Column]) -> str:
    return ", ".join(column.name for column in columns)


def load(
    engine: duckdb.DuckDBPyConnection,
    grid: Grid,
    columns: Sequence[Column],
    rows: Sequence[Sequence[str | None]],
) -> None:
    """Put the values into a table of the engine's, each in its column's type, with the key."""
    listed = ", ".join(f"c{i} VARCHAR" for i in range(len(columns)))
    engine.execute(f"CREATE OR REPLACE TEMP TABLE _m_texts ({listed})")
    if rows:
        marks = ", ".join(f"${i + 1}" for i in range(len(columns)))
        engine.executemany(f"INSERT INTO temp.main._m_texts VALUES ({marks})", [*map(list, rows)])
    for i, column in enumerate(columns):
        wrong = engine.execute(
            f"SELECT c{i} FROM temp.main._m_texts WHERE c{i} IS NOT NULL"
            f" AND TRY_CAST(c{i} AS {column.type}) IS NULL LIMIT 1"
        ).fetchall()
        if wrong:
            text = wrong[0][0]
            remedy = (
                f"write {column.name}=NULL to leave it empty."
                if text == ""
                else "correct it, or leave the column out."
            )
            raise MidspreadError(
                f"enter: {column.name} of {grid.name} takes {column.type}, and {text!r} is none; "
                f"{remedy}"
            )
        if (
            column.name in grid.keys
            and engine.execute(
                f"SELECT 1 FROM temp.main._m_texts WHERE c{i} IS NULL LIMIT 1"
            ).fetchall()
        ):
            raise MidspreadError(
                f"enter: {column.name} is part of the key of {grid.name} and cannot be NULL; give "
                f"it a value."
            )
    typed = ", ".join(
        f"CAST(c{i} AS {column.type}) AS {quoted(column.name)}" for i, column in enumerate(columns)
    )
    engine.execute(
        f"CREATE OR REPLACE TEMP TABLE _m_given AS SELECT *, {key_text(grid.keys)} AS {KEY}"
        f" FROM (SELECT {typed} FROM temp.main._m_texts)"
    )
    twice = engine.execute(
        f"SELECT {KEY} FROM {GIVEN} GROUP BY ALL HAVING count(*) > 1 LIMIT 1"
    ).fetchall()
    if twice:
        raise MidspreadError(
            f"enter: the key {twice[0][0]} ({', '.join(grid.keys)}) is given twice; give it once."
        )


def count_new(engine: duckdb.DuckDBPyConnection, grid: Grid) -> int:
    """How many of the given rows are not there yet."""
    rows = engine.execute(
        f"SELECT count(*) FROM {GIVEN} WHERE {KEY} NOT IN"
        f" (SELECT {key_text(grid.keys)} FROM {ledger.contents(grid.name)})"
    ).fetchall()
    return int(rows[0][0])


def no_such_row(engine: duckdb.DuckDBPyConnection, grid: Grid) -> MidspreadError:
    keys = engine.execute(
        f"SELECT {KEY} FROM {GIVEN} WHERE {KEY} NOT IN (SELECT {key_text(grid.keys)}"
        f" FROM {ledger.contents(grid.name)}) ORDER BY ALL LIMIT 1"
    ).fetchall()
    return MidspreadError(
        f"enter: {grid.name} has no row with the key {keys[0][0]} ({', '.join(grid.keys)}); "
        f"midspread show {grid.name} lists those it has."
    )
