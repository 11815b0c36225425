"""Noting how a change of a grid can be taken back, and taking it back."""

import json
from typing import Final

import duckdb

from midspread.engine.errors import MidspreadError
from midspread.engine.grids import ledger
from midspread.engine.grids.model import Grid
from midspread.engine.grids.tables import key_text
from midspread.engine.store.quoting import literal, quoted

_LEDGER_TABLES: Final = ("grids", "columns", "entries", "versions")
CHANGES_KEPT: Final = 50


def note_undo(
    engine: duckdb.DuckDBPyConnection, stamp: int, name: str, before: Grid | None
) -> None:
    """Note the state of a grid before a change, within the change's own transaction.

    Call it before anything of the grid is written. What the ledger says of it is noted whole, its
    rows are copied aside.

    Parameters
    ----------
    stamp : int
        Of the change.
    name : str
        Of the grid.
    before : Grid or None
        The grid as it is; None where the change makes it.
    """
    steps = [f"DROP TABLE IF EXISTS {ledger.contents(name)}"]
    for table in _LEDGER_TABLES:
        steps.append(
            f"DELETE FROM store.ledger.{table} WHERE lower(grid) = {literal(name.lower())}"
        )
        steps += _inserts(engine, table, name)
    if before is not None and before.version > 0:
        aside = f"store.aside.{quoted(f'{stamp} {name}')}"
        engine.execute(f"CREATE OR REPLACE TABLE {aside} AS FROM {ledger.contents(name)}")
        steps.append(f"CREATE TABLE {ledger.contents(name)} AS FROM {aside}")
        steps.append(f"DROP TABLE {aside}")
    write_steps(engine, stamp, name, steps)


def note_rows(
    engine: duckdb.DuckDBPyConnection, stamp: int, grid: Grid, given: str, key: str
) -> None:
    """Note the present rows of some keys before they are changed.

    Parameters
    ----------
    stamp : int
        Of the change.
    grid : Grid
        As it is.
    given : str
        A table with the keys concerned, as SQL.
    key : str
        Its column that holds them.
    """
    rows = f"store.aside.{quoted(f'{stamp} {grid.name}')}"
    keys = f"store.aside.{quoted(f'{stamp} {grid.name} keys')}"
    entries = f"store.aside.{quoted(f'{stamp} {grid.name} entries')}"
    table, text = ledger.contents(grid.name), key_text(grid.keys)
    own = f"lower(grid) = {literal(grid.name.lower())} AND key IN (FROM {keys})"
    engine.execute(f"CREATE TABLE {keys} AS SELECT {key} AS key FROM {given}")
    engine.execute(f"CREATE TABLE {rows} AS FROM {table} WHERE {text} IN (FROM {keys})")
    engine.execute(f"CREATE TABLE {entries} AS FROM store.ledger.entries WHERE {own}")
    steps = [
        f"DELETE FROM {table} WHERE {text} IN (FROM {keys})",
        f"INSERT INTO {table} FROM {rows}",
        f"DELETE FROM store.ledger.entries WHERE {own}",
        f"INSERT INTO store.ledger.entries FROM {entries}",
        f"UPDATE store.ledger.grids SET row_count = {grid.rows}, stamp = {grid.stamp}"
        f" WHERE lower(grid) = {literal(grid.name.lower())}",
        *(f"DROP TABLE {one}" for one in (rows, keys, entries)),
    ]
    write_steps(engine, stamp, grid.name, steps)


def write_steps(engine: duckdb.DuckDBPyConnection, stamp: int, name: str, steps: list[str]) -> None:
    """Note the statements that take a change back."""
    for place, step in enumerate(steps):
        engine.execute(
            "INSERT INTO store.ledger.undo VALUES ($1, $2, $3, $4)", [stamp, name, place, step]
        )
    _forget_old(engine, stamp)


def _inserts(engine: duckdb.DuckDBPyConnection, table: str, name: str) -> list[str]:
    """Statements that put the present rows of a ledger's table back."""
    described = engine.execute(f"DESCRIBE store.ledger.{table}").fetchall()
    kinds = {str(row[0]): str(row[1]) for row in described}
    shape = json.dumps([dict.fromkeys(kinds, "VARCHAR")])
    rows = engine.execute(
        f"SELECT to_json(list(r))::VARCHAR FROM (SELECT "
        f"{', '.join(f'{quoted(n)}::VARCHAR AS {quoted(n)}' for n in kinds)} "
        f"FROM store.ledger.{table} WHERE lower(grid) = lower($1)) AS r",
        [name],
    ).fetchall()
    if rows[0][0] is None:
        return []
    values = ", ".join(f"CAST(r.{quoted(n)} AS {kind})" for n, kind in kinds.items())
    return [
        f"INSERT INTO store.ledger.{table} SELECT {values} FROM "
        f"(SELECT unnest(from_json({literal(rows[0][0])}, {literal(shape)})) AS r)"
    ]


def _forget_old(engine: duckdb.DuckDBPyConnection, stamp: int) -> None:
    """Drop the notes of changes so far back that nobody will take them back, but of discards."""
    old = stamp - CHANGES_KEPT
    discarded = "SELECT stamp FROM store.ledger.changes WHERE action = 'discard'"
    for (table,) in engine.execute(
        "SELECT table_name FROM duckdb_tables() WHERE database_name = 'store'"
        " AND schema_name = 'aside' AND TRY_CAST(split_part(table_name, ' ', 1) AS BIGINT) <= $1"
        f" AND TRY_CAST(split_part(table_name, ' ', 1) AS BIGINT) NOT IN ({discarded})",
        [old],
    ).fetchall():
        engine.execute(f"DROP TABLE IF EXISTS store.aside.{quoted(table)}")
    engine.execute(
        f"DELETE FROM store.ledger.undo WHERE stamp <= $1 AND stamp NOT IN ({discarded})", [old]
    )


def undo(engine: duckdb.DuckDBPyConnection, name: str | None = None) -> tuple[str, str]:
    """Take the last change back.

    The grids have the stamps that they had before, for so have their contents: what was computed
    from them then is fresh again.

    Parameters
    ----------
    engine : duckdb.DuckDBPyConnection
        Of the store, within `Store.writing`.
    name : str, optional
        Only of this grid.

    Returns
    -------
    tuple of (str, str)
        The grids concerned, and what was taken back.
    """
    condition = "true" if name is None else f"lower(grid) = {literal(name.lower())}"
    rows = engine.execute(
        f"SELECT stamp FROM store.ledger.undo WHERE {condition} ORDER BY stamp DESC LIMIT 1"
    ).fetchall()
    if not rows:
        whose = f" of {name}" if name else ""
        raise MidspreadError(
            f"undo: there is no change{whose} left to take back; midspread history GRID lists what "
            f"was done."
        )
    stamp = rows[0][0]
    steps = engine.execute(
        "SELECT grid, step FROM store.ledger.undo WHERE stamp = $1 ORDER BY grid, place", [stamp]
    ).fetchall()
    what = engine.execute(
        "SELECT action, name, key FROM store.ledger.changes WHERE stamp = $1 LIMIT 1", [stamp]
    ).fetchall()
    action = _told(*what[0]) if what else "change"
    names = sorted({name for name, _ in steps})
    if action == "discard":
        _check_absent(engine, names)
    for _, step in steps:
        engine.execute(step)
    engine.execute("DELETE FROM store.ledger.undo WHERE stamp = $1", [stamp])
    now = ledger.next_stamp(engine)
    for grid in names:
        engine.execute(
            "UPDATE store.ledger.grids SET changed = now()"
            " WHERE lower(grid) = lower($1) AND version > 0",
            [grid],
        )
        _mark_lost_versions(engine, grid)
        ledger.log(engine, now, grid, "undo", note=f"took back: {action}")
    return ", ".join(names), action


def _told(action: str, column: str, key: str) -> str:
    """A change in words."""
    whose = ", ".join(json.loads(key)) if key else ""
    if column and whose:
        return f"{action} {column} of {whose}"
    return " ".join(part for part in (action, column, whose) if part)


def _check_absent(engine: duckdb.DuckDBPyConnection, names: list[str]) -> None:
    """Raise where a discarded grid would come back in the place of one that was made since."""
    there = ledger.grids(engine)
    for name in names:
        if name.casefold() in there:
            raise MidspreadError(
                f"undo: the discarded grid {name} cannot come back, as another of its name was "
                f"made since; discard that one first."
            )


def _mark_lost_versions(engine: duckdb.DuckDBPyConnection, name: str) -> None:
    """Note which earlier versions were dropped since the state that has come back."""
    engine.execute(
        "UPDATE store.ledger.versions AS v SET is_kept = false WHERE lower(v.grid) = lower($1)"
        " AND v.version < (SELECT g.version FROM store.ledger.grids AS g"
        " WHERE lower(g.grid) = lower($1))"
        " AND v.grid || ' ' || v.version NOT IN (SELECT table_name FROM duckdb_tables()"
        " WHERE database_name = 'store' AND schema_name = 'earlier')",
        [name],
    )
