"""`history` and `changes`: what was done to a grid, and how two of its versions differ."""

from pathlib import Path
from typing import TYPE_CHECKING, Final

import duckdb

from midspread.engine.errors import MidspreadError, UsageError
from midspread.engine.grids import ledger
from midspread.engine.grids.model import Grid
from midspread.engine.nearest import nearest
from midspread.engine.store.quoting import literal, quoted
from midspread.engine.store.store import Store

if TYPE_CHECKING:
    import pyarrow as pa

_NUMERIC: Final = ("INT", "DOUBLE", "FLOAT", "DECIMAL", "REAL", "NUMERIC", "HUGEINT")


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
    if version not in kept:
        listed = ", ".join(map(str, kept)) or "none"
        raise MidspreadError(
            f"{command}: version {version} of {grid.name} is not kept; those kept are {listed}."
        )
    return ledger.earlier(grid.name, version)


def changes(
    store_path: Path, name: str, before: int | None = None, after: int | None = None
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
            table = engine.sql(_changes_query(engine, grid, old, new)).to_arrow_table()
    finally:
        store.close()
    return table, first, last


def _changes_query(engine: duckdb.DuckDBPyConnection, grid: Grid, old: str, new: str) -> str:
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
    for name in shared:
        column = quoted(name)
        change = in_se = "CAST(NULL AS DOUBLE)"
        if kinds[name].upper().startswith(_NUMERIC) or "INT" in kinds[name].upper():
            change = f"CAST(n.{column} AS DOUBLE) - CAST(o.{column} AS DOUBLE)"
            se = _standard_error(name, shared)
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


def _standard_error(name: str, columns: list[str]) -> str:
    """The column that holds a column's standard error; empty when there is none."""
    lower = {one.casefold(): one for one in columns}
    own = lower.get(f"{name.casefold()}_se")
    if own:
        return own
    is_plain = name.casefold() not in ("se", "n") and not name.casefold().startswith("n_")
    is_error = name.casefold().endswith("_se")
    return lower.get("se", "") if is_plain and not is_error else ""
