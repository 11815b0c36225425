"""`history` and `changes`: what was done to a grid, and how two of its versions differ."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import TYPE_CHECKING, Final

import duckdb

from midspread.engine.errors import MidspreadError, UsageError
from midspread.engine.grids import ledger
from midspread.engine.grids.model import Grid, GridKind
from midspread.engine.nearest import nearest
from midspread.engine.store.quoting import literal, quoted
from midspread.engine.store.store import Store

if TYPE_CHECKING:
    import pyarrow as pa

_FRACTIONAL: Final = ("DOUBLE", "FLOAT", "DECIMAL")


def found_grid(engine: duckdb.DuckDBPyConnection, command: str, name: str) -> Grid:
    """The grid of a name.

    Raises
    ------
    MidspreadError
        When there is none, with the nearest name.
    """
    grids = ledger.grids(engine)
    grid = grids.get(name.casefold())
    if grid is None:
        meant = nearest(name, [one.name for one in grids.values()])
        hint = f"did you mean {meant}?" if meant else "midspread show lists those there are."
        raise MidspreadError(f"{command}: there is no grid {name}; {hint}")
    return grid


def history(store_path: Path, name: str) -> "pa.Table":
    """What was done to a grid, the latest first: when, what, which cell, and why."""
    store = Store.open(store_path, create=False)
    with store.reading() as engine:
        known = engine.execute(
            "SELECT 1 FROM store.ledger.changes WHERE lower(grid) = lower($1) LIMIT 1", [name]
        ).fetchall()
        if not known:
            found_grid(engine, "history", name)
        table = engine.sql(
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
    store.close()
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
    store = Store.open(store_path, create=False)
    try:
        with store.reading() as engine:
            table = version_table(engine, "show", grid, version)
            (made, cause, rows, sql) = engine.execute(
                "SELECT epoch_us(made), cause, row_count, sql FROM store.ledger.versions"
                " WHERE lower(grid) = lower($1) AND version = $2",
                [grid.name, version],
            ).fetchall()[0]
            first = first_rows(engine, grid, table, most_rows)
    finally:
        store.close()
    return EarlierVersion(ledger.moment(made), cause, rows, sql, first)


def first_rows(
    engine: duckdb.DuckDBPyConnection, grid: Grid, table: str, most_rows: int
) -> "pa.Table":
    """The first rows of a grid's table in the order of its key, where that version has one."""
    there = {str(row[0]) for row in engine.execute(f"DESCRIBE {table}").fetchall()}
    order = ", ".join(quoted(key) for key in grid.keys if key in there)
    by_key = f" ORDER BY {order}" if order else ""
    return engine.sql(f"FROM {table}{by_key} LIMIT {most_rows}").to_arrow_table()


def changes(
    store_path: Path,
    name: str,
    before: int | None = None,
    after: int | None = None,
    columns: Sequence[str] = (),
) -> tuple["pa.Table", int, int]:
    """How two versions of a grid differ, by key.

    Parameters
    ----------
    store_path : Path
        The store.
    name : str
        Of the grid, which must have a key.
    before, after : int, optional
        The versions; by default the last one before the present, and the present.
    columns : sequence of str
        Only changes of these columns; of all when empty. Rows added and gone are always told.

    Returns
    -------
    tuple of (pyarrow.Table, int, int)
        One row a cell: the key, what happened (added, gone, changed), the column, the value before
        and after, the change, and the change in standard errors where the grid carries one: in a
        column of the same name with _se, or in one called se. The two versions.
    """
    store = Store.open(store_path, create=False)
    try:
        with store.reading() as engine:
            grid = found_grid(engine, "changes", name)
            if grid.kind is GridKind.ENTERED:
                version_table(engine, "changes", grid, 0)
            if not grid.keys:
                raise MidspreadError(
                    f"changes: {grid.name} has no key, so its rows cannot be told apart; name one "
                    f"with midspread keep {grid.name} --replace --key."
                )
            last = grid.version if after is None else after
            first = last - 1 if before is None else before
            if first < 1 or last < 1:
                raise UsageError(
                    f"changes: {grid.name} has only version {grid.version}; there is something to "
                    f"compare once a refresh has changed it."
                )
            old = version_table(engine, "changes", grid, first)
            new = version_table(engine, "changes", grid, last)
            only = _of_grid(grid, columns)
            table = engine.sql(_changes_query(engine, grid, old, new, only)).to_arrow_table()
    finally:
        store.close()
    return table, first, last


def _of_grid(grid: Grid, names: Sequence[str]) -> frozenset[str]:
    """The columns of some names as the grid spells them; of all when there are none."""
    for name in names:
        if grid.column(name) is None:
            there = [column.name for column in grid.columns]
            meant = nearest(name, there)
            hint = f"did you mean {meant}?" if meant else f"it has {', '.join(there)}."
            raise UsageError(f"changes: {grid.name} has no column {name}; {hint}")
    wanted = {name.casefold() for name in names}
    return frozenset(
        column.name for column in grid.columns if not names or column.name.casefold() in wanted
    )


def _changes_query(
    engine: duckdb.DuckDBPyConnection, grid: Grid, old: str, new: str, only: frozenset[str]
) -> str:
    kinds = {str(row[0]): str(row[1]) for row in engine.execute(f"DESCRIBE {new}").fetchall()}
    before = {str(row[0]) for row in engine.execute(f"DESCRIBE {old}").fetchall()}
    shared = [name for name in kinds if name in before and name not in grid.keys]
    on = " AND ".join(f"o.{quoted(k)} IS NOT DISTINCT FROM n.{quoted(k)}" for k in grid.keys)
    keys = ", ".join(f"coalesce(n.{quoted(k)}, o.{quoted(k)}) AS {quoted(k)}" for k in grid.keys)
    there = "n._m_there", "o._m_there"
    joined = (
        f"(SELECT *, true AS _m_there FROM {old}) AS o FULL JOIN"
        f" (SELECT *, true AS _m_there FROM {new}) AS n ON {on}"
    )
    nothing = (
        'CAST(NULL AS VARCHAR) AS "column", CAST(NULL AS VARCHAR) AS before,'
        " CAST(NULL AS VARCHAR) AS after, CAST(NULL AS DOUBLE) AS change,"
        " CAST(NULL AS DOUBLE) AS in_se"
    )
    parts = [
        f"SELECT {keys}, 'added' AS what, {nothing} FROM {joined} WHERE {there[1]} IS NULL",
        f"SELECT {keys}, 'gone' AS what, {nothing} FROM {joined} WHERE {there[0]} IS NULL",
    ]
    for name in [one for one in shared if one in only]:
        column = quoted(name)
        change = in_se = "CAST(NULL AS DOUBLE)"
        if _is_number(kinds[name]):
            change = f"CAST(n.{column} AS DOUBLE) - CAST(o.{column} AS DOUBLE)"
            se = _standard_error(name, {one: kinds[one] for one in shared})
            if se:
                squares = " + ".join(f"CAST({v}.{quoted(se)} AS DOUBLE) ** 2" for v in "on")
                spread = f"sqrt({squares})"
                in_se = f"({change}) / nullif({spread}, 0)"
        parts.append(
            f"SELECT {keys}, 'changed' AS what, {literal(name)} AS \"column\","
            f" CAST(o.{column} AS VARCHAR) AS before, CAST(n.{column} AS VARCHAR) AS after,"
            f" {change} AS change, {in_se} AS in_se FROM {joined}"
            f" WHERE {there[0]} AND {there[1]} AND o.{column} IS DISTINCT FROM n.{column}"
        )
    order = ", ".join(quoted(key) for key in grid.keys)
    return f'FROM ({" UNION ALL ".join(parts)}) ORDER BY {order}, what, "column"'


def _is_number(kind: str) -> bool:
    upper = kind.upper()
    is_whole = upper.endswith("INT") or upper in ("INTEGER", "UINTEGER")
    return is_whole or (upper.startswith(_FRACTIONAL) and "[" not in upper)


def _standard_error(name: str, kinds: Mapping[str, str]) -> str:
    """The column that holds a column's standard error; empty when there is none.

    That is the one of its name with _se; a plain se belongs to the last column of fractions before
    it.
    """
    lower = {one.casefold(): one for one in kinds}
    own = lower.get(f"{name.casefold()}_se")
    if own or "se" not in lower:
        return own or ""
    names = list(kinds)
    before = [
        one
        for one in names[: names.index(lower["se"])]
        if kinds[one].upper().startswith(_FRACTIONAL) and not one.casefold().endswith("_se")
    ]
    return lower["se"] if before and before[-1] == name else ""
