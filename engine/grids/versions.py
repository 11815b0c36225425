"""`history`: what was done to a grid, and its versions as they were."""

from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import TYPE_CHECKING

import duckdb

from midspread.engine.errors import MidspreadError
from midspread.engine.grids import ledger
from midspread.engine.grids.model import Grid, GridKind
from midspread.engine.store.quoting import literal, quoted
from midspread.engine.store.store import reading

if TYPE_CHECKING:
    import pyarrow as pa


def history(store_path: Path, name: str) -> "pa.Table":
    """What was done to a grid, the latest first: when, what, which cell, and why."""
    with reading(store_path) as engine:
        known = engine.execute(
            "SELECT 1 FROM store.ledger.changes WHERE lower(grid) = lower($1) LIMIT 1", [name]
        ).fetchall()
        if not known:
            ledger.found_grid(engine, "history", name)
        table: pa.Table = engine.sql(
            "SELECT c.moment::TIMESTAMP(0) AS moment, c.action, v.version, v.row_count AS rows,"
            " nullif(c.key, '') AS key, nullif(c.name, '') AS column, c.old,"
            " CASE WHEN c.action IN ('keep', 'refresh') THEN NULL ELSE c.new END AS new,"
            " nullif(c.note, '') AS note"
            " FROM store.ledger.changes AS c LEFT JOIN store.ledger.versions AS v"
            " ON lower(v.grid) = lower(c.grid) AND c.action IN ('keep', 'refresh')"
            " AND v.version = TRY_CAST(c.new AS INTEGER)"
            f" WHERE lower(c.grid) = {literal(name.lower())}"
            # A push that was begun and then confirmed or refused is one line, not two.
            " AND NOT (c.action = 'push begun' AND EXISTS (FROM store.ledger.changes AS d WHERE"
            " d.stamp = c.stamp AND d.action IN ('pushed', 'push failed')))"
            " ORDER BY c.stamp DESC, c.key, c.name"
        ).to_arrow_table()
        return table


def version_table(engine: duckdb.DuckDBPyConnection, command: str, grid: Grid, version: int) -> str:
    """The table that holds a version's rows, as SQL.

    Raises
    ------
    MidspreadError
        When that version is not kept.
    """
    if version == grid.version and version > 0:
        return ledger.contents(grid.name)
    kept = [
        number
        for (number,) in engine.execute(
            "SELECT version FROM store.ledger.versions WHERE lower(grid) = lower($1)"
            " AND is_kept ORDER BY version",
            [grid.name],
        ).fetchall()
    ]
    if grid.kind is GridKind.ENTERED:
        raise MidspreadError(
            f"{command}: {grid.name} is a grid of typed-in values, which has no versions; "
            f"midspread history {grid.name} lists every change."
        )
    if version not in kept:
        listed = ", ".join(map(str, kept)) or "none"
        raise MidspreadError(
            f"{command}: version {version} of {grid.name} is not kept; those kept are {listed}."
        )
    return ledger.earlier(grid.name, version)


@dataclass(frozen=True)
class EarlierVersion:
    """What is known of an earlier version: when and why it was made, its query, its rows."""

    made: datetime | None
    cause: str
    rows: int
    sql: str
    first: "pa.Table"


def earlier_version(store_path: Path, grid: Grid, version: int, most_rows: int) -> EarlierVersion:
    """An earlier version of a grid with its first rows.

    Raises
    ------
    MidspreadError
        When that version is not kept.
    """
    with reading(store_path) as engine:
        table = version_table(engine, "show", grid, version)
        (made, cause, rows, sql) = engine.execute(
            "SELECT epoch_us(made), cause, row_count, sql FROM store.ledger.versions"
            " WHERE lower(grid) = lower($1) AND version = $2",
            [grid.name, version],
        ).fetchall()[0]
        first = first_rows(engine, grid, table, most_rows)
    return EarlierVersion(ledger.moment(made), cause, rows, sql, first)


def first_rows(
    engine: duckdb.DuckDBPyConnection, grid: Grid, table: str, most_rows: int
) -> "pa.Table":
    """The first rows of a grid's table in the order of its key, where that version has one."""
    there = {str(row[0]) for row in engine.execute(f"DESCRIBE {table}").fetchall()}
    order = ", ".join(quoted(key) for key in grid.keys if key in there)
    by_key = f" ORDER BY {order}" if order else ""
    return engine.sql(f"FROM {table}{by_key} LIMIT {most_rows}").to_arrow_table()
