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


def note_undo(engine: duckdb.DuckDBPyConnection, name: str, before: Grid | None) -> None:
    """Note the state of a grid before a change, within the change's own transaction.

    Call it before anything is written and before the change takes its stamp: the note is for the
    next stamp. What the ledger says of the grid is noted whole, its rows are copied aside.
    """
    rows = engine.execute("SELECT value::BIGINT FROM store.ledger.about WHERE name = 'changes'")
    stamp = int(rows.fetchall()[0][0]) + 1
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


def note_rows(engine: duckdb.DuckDBPyConnection, grid: Grid, given: str, key: str) -> int:
    """Note the present rows of some keys before they are changed, and take the change's stamp.

    Parameters
    ----------
    grid : Grid
        As it is.
    given : str
        A table with the keys concerned, as SQL.
    key : str
        Its column that holds them.
    """
    stamp = ledger.next_stamp(engine)
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
        f"UPDATE store.ledger.grids SET row_count = (SELECT count(*) FROM {table})"
        f" WHERE lower(grid) = {literal(grid.name.lower())}",
        *(f"DROP TABLE {one}" for one in (rows, keys, entries)),
    ]
    write_steps(engine, stamp, grid.name, steps)
    return stamp


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
    for _, step in steps:
        engine.execute(step)
    engine.execute("DELETE FROM store.ledger.undo WHERE stamp = $1", [stamp])
    what = engine.execute(
        "SELECT action, name, key FROM store.ledger.changes WHERE stamp = $1 LIMIT 1", [stamp]
    ).fetchall()
    action = " ".join(part for part in what[0] if part) if what else "change"
    now = ledger.next_stamp(engine)
    names = sorted({name for name, _ in steps})
    for grid in names:
        engine.execute(
            "UPDATE store.ledger.grids SET stamp = $1, changed = now()"
            " WHERE lower(grid) = lower($2) AND version > 0",
            [now, grid],
        )
        ledger.log(engine, now, grid, "undo", note=f"took back: {action}")
    return ", ".join(names), action
