"""The ledger of grids: reading and writing what is known of them.

Every function takes the store's engine within `Store.reading` or `Store.writing`; what is written
in one such block is one transaction.
"""

import json
from collections.abc import Mapping, Sequence
from datetime import datetime, timedelta
from typing import Any, Final

import duckdb

from midspread.engine.errors import MidspreadError
from midspread.engine.grids.model import Column, ColumnKind, Grid, GridKind, Record
from midspread.engine.nearest import did_you_mean, nearest
from midspread.engine.store.answers import EPOCH
from midspread.engine.store.quoting import quoted

_GRID_FIELDS: Final = (
    "grid, kind, sql, keys, stamp, version, row_count, epoch_us(changed), failure, reads, record,"
    " folder"
)


def grids(engine: duckdb.DuckDBPyConnection) -> dict[str, Grid]:
    """Every grid, by folded name, in the order of their names."""
    rows = engine.execute(
        f"SELECT {_GRID_FIELDS} FROM store.ledger.grids ORDER BY lower(grid)"
    ).fetchall()
    columns: dict[str, list[Column]] = {}
    for grid, name, kind, sql_type, expression in engine.execute(
        "SELECT grid, name, kind, type, expression FROM store.ledger.columns ORDER BY grid, place"
    ).fetchall():
        columns.setdefault(grid, []).append(Column(name, sql_type, ColumnKind(kind), expression))
    made = [_grid(row, tuple(columns.get(row[0], ()))) for row in rows]
    return {grid.folded: grid for grid in made}


def found_grid(engine: duckdb.DuckDBPyConnection, command: str, name: str) -> Grid:
    """The grid of a name.

    Raises
    ------
    MidspreadError
        When there is none, with the nearest name.
    """
    return named(grids(engine), command, name)


def named(known: Mapping[str, Grid], command: str, name: str) -> Grid:
    """The grid of a name among those known, by folded name; raises as `found_grid` does."""
    grid = known.get(name.casefold())
    if grid is None:
        meant = nearest(name, [one.name for one in known.values()])
        hint = did_you_mean(meant, "midspread show lists those there are.")
        raise MidspreadError(f"{command}: there is no grid {name}; {hint}")
    return grid


def stamps(engine: duckdb.DuckDBPyConnection) -> dict[str, tuple[str, int]]:
    """Name as written and stamp of every grid that has contents, by folded name."""
    rows = engine.execute("SELECT grid, stamp FROM store.ledger.grids WHERE version > 0").fetchall()
    return {name.casefold(): (name, stamp) for name, stamp in rows}


def _grid(row: Sequence[Any], columns: tuple[Column, ...]) -> Grid:
    name, kind, sql, keys, stamp, version, count, changed, failure, reads, record, folder = row
    return Grid(
        name=name,
        kind=GridKind(kind),
        sql=sql,
        keys=tuple(json.loads(keys)),
        columns=columns,
        stamp=stamp,
        version=version,
        rows=count,
        changed=moment(changed),
        failure=failure,
        reads=tuple(json.loads(reads)),
        record=Record.from_json(record),
        folder=folder,
    )


def moment(microseconds: int | None) -> datetime | None:
    """A time of the ledger, in UTC."""
    return None if microseconds is None else EPOCH + timedelta(microseconds=microseconds)


def write_grid(engine: duckdb.DuckDBPyConnection, grid: Grid) -> None:
    """Write everything known of a grid, in place of what was."""
    forget_grid(engine, grid.name)
    engine.execute(
        "INSERT INTO store.ledger.grids (grid, kind, sql, keys, stamp, version, row_count, changed,"
        " failure, reads, record, folder)"
        " VALUES ($1, $2, $3, $4, $5, $6, $7, $8, $9, $10, $11, $12)",
        [
            grid.name,
            str(grid.kind),
            grid.sql,
            json.dumps(grid.keys, ensure_ascii=False),
            grid.stamp,
            grid.version,
            grid.rows,
            grid.changed,
            grid.failure,
            json.dumps(grid.reads, ensure_ascii=False),
            grid.record.to_json(),
            grid.folder,
        ],
    )
    for place, column in enumerate(grid.columns):
        engine.execute(
            "INSERT INTO store.ledger.columns VALUES ($1, $2, $3, $4, $5, $6)",
            [grid.name, column.name, str(column.kind), column.type, column.expression, place],
        )


def forget_grid(engine: duckdb.DuckDBPyConnection, name: str) -> None:
    """Drop what is known of a grid; its contents, entries and versions are left."""
    engine.execute("DELETE FROM store.ledger.grids WHERE lower(grid) = lower($1)", [name])
    engine.execute("DELETE FROM store.ledger.columns WHERE lower(grid) = lower($1)", [name])


def next_stamp(engine: duckdb.DuckDBPyConnection) -> int:
    """A number for a change, never given before in this store."""
    rows = engine.execute(
        "UPDATE store.ledger.about SET value = (value::BIGINT + 1)::VARCHAR WHERE name = 'changes'"
        " RETURNING value::BIGINT"
    ).fetchall()
    return int(rows[0][0])


def contents(name: str) -> str:
    """The table that holds a grid's rows, for SQL."""
    return f"store.main.{quoted(name)}"


def earlier(name: str, version: int) -> str:
    """The table that holds an earlier version's rows, for SQL."""
    return f"store.earlier.{quoted(f'{name} {version}')}"


def log(
    engine: duckdb.DuckDBPyConnection,
    stamp: int,
    grid: str,
    action: str,
    *,
    key: str = "",
    column: str = "",
    old: str | None = None,
    new: str | None = None,
    note: str = "",
) -> None:
    """Note what was changed.

    Parameters
    ----------
    stamp : int
        Of the change; one change may have several lines.
    action : str
        What was done: entered, deleted, kept, refreshed, …
    key, column : str
        Which cell, where it was one; the key as a JSON list of texts.
    old, new : str, optional
        The cell's values as text, None for NULL.
    note : str
        What the user wrote beside it, or why it happened.
    """
    engine.execute(
        "INSERT INTO store.ledger.changes VALUES ($1, now(), $2, $3, $4, $5, $6, $7, $8)",
        [stamp, grid, action, key, column, old, new, note],
    )
