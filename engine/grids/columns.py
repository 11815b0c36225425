"""`column`: columns that people fill in, or that are computed from their own row."""

from collections.abc import Callable
from dataclasses import replace
from datetime import UTC, datetime
from pathlib import Path

import duckdb

from midspread.engine.errors import MidspreadError
from midspread.engine.grids import ledger
from midspread.engine.grids.definitions import one_column
from midspread.engine.grids.ledger import found_grid
from midspread.engine.grids.model import Column, ColumnKind, Grid, GridKind
from midspread.engine.grids.restoring import note_undo
from midspread.engine.grids.tables import computed_in_order, contents_query, equip
from midspread.engine.inputs.scanning import mentions_of
from midspread.engine.nearest import did_you_mean, nearest
from midspread.engine.store.quoting import literal, quoted
from midspread.engine.store.store import writing


def add_column(
    store_path: Path, name: str, text: str, memory: str | None = None
) -> tuple[Grid, Column]:
    """Add a column to a grid.

    Parameters
    ----------
    store_path : Path
        The store.
    name : str
        Of the grid.
    text : str
        ``remark TEXT``, to be typed in, or ``allowance_s AS (limit_s + 5)``, computed.
    memory : str, optional
        Most memory to take.

    Returns
    -------
    tuple of (Grid, Column)
        The grid as it is now, and the column.

    Raises
    ------
    MidspreadError
        With one sentence; nothing is changed then.
    """

    def change(engine: duckdb.DuckDBPyConnection, grid: Grid) -> Grid:
        column = one_column(engine, "column", text)
        if grid.column(column.name) is not None:
            raise MidspreadError(
                f"column: {grid.name} has a column {column.name} already; choose another name, or "
                f"drop that one with --drop."
            )
        if column.kind is ColumnKind.ENTERED and grid.kind is GridKind.DERIVED and not grid.keys:
            raise MidspreadError(
                f"column: typed-in values follow a row's key, and {grid.name} has none; name one "
                f"with midspread keep {grid.name} --replace --key."
            )
        if column.kind is ColumnKind.COMPUTED:
            column = _typed(engine, grid, column)
        return replace(grid, columns=(*grid.columns, column))

    grid = _change(store_path, name, "column added", change, memory)
    return grid, grid.columns[-1]


def drop_column(store_path: Path, name: str, column_name: str, memory: str | None = None) -> Grid:
    """Take a column out of a grid; its typed-in values come back with `undo` only."""

    def change(engine: duckdb.DuckDBPyConnection, grid: Grid) -> Grid:
        column = grid.column(column_name)
        if column is None:
            meant = nearest(column_name, [one.name for one in grid.columns])
            hint = did_you_mean(meant, f"midspread show {grid.name} lists them.")
            raise MidspreadError(f"column: {grid.name} has no column {column_name}; {hint}")
        if column.kind is ColumnKind.DERIVED or column.name in grid.keys:
            what = "comes from its query" if column.kind is ColumnKind.DERIVED else "is its key"
            raise MidspreadError(
                f"column: {column.name} of {grid.name} {what} and cannot be dropped; change the "
                f"query with midspread keep {grid.name} --replace."
            )
        users = [
            other.name
            for other in grid.of_kind(ColumnKind.COMPUTED)
            if other is not column and column.name.casefold() in mentions_of(other.expression).names
        ]
        if users:
            raise MidspreadError(
                f"column: {', '.join(users)} of {grid.name} rests on {column.name}; drop that "
                f"first."
            )
        engine.execute(
            f"DELETE FROM store.ledger.entries WHERE lower(grid) = {literal(grid.name.lower())}"
            f" AND lower(name) = {literal(column.name.lower())}"
        )
        return replace(grid, columns=tuple(one for one in grid.columns if one is not column))

    return _change(store_path, name, "column dropped", change, memory)


def _change(
    store_path: Path,
    name: str,
    action: str,
    change: Callable[[duckdb.DuckDBPyConnection, Grid], Grid],
    memory: str | None,
) -> Grid:
    """Change a grid's columns and write its table anew, in one transaction."""
    with writing(store_path, memory=memory) as engine:
        before = found_grid(engine, "column", name)
        if before.version == 0:
            raise MidspreadError(
                f"column: {before.name} has not been computed yet; run midspread refresh "
                f"{before.name} first."
            )
        stamp = ledger.next_stamp(engine)
        note_undo(engine, stamp, before.name, before)
        after = change(engine, before)
        computed_in_order(after)  # refuses a circle
        equip(engine, after)
        table = ledger.contents(before.name)
        kinds = (ColumnKind.DERIVED,) if before.kind is GridKind.DERIVED else (ColumnKind.ENTERED,)
        kept = [column.name for column in before.of_kind(*kinds)]
        listed = ", ".join(quoted(one) for one in kept)
        fresh = [
            column
            for column in after.of_kind(ColumnKind.ENTERED)
            if before.kind is GridKind.ENTERED and column.name not in kept
        ]
        empty = "".join(f", CAST(NULL AS {c.type}) AS {quoted(c.name)}" for c in fresh)
        query = contents_query(after, f"(SELECT {listed}{empty} FROM {table})")
        try:
            engine.execute(f"CREATE OR REPLACE TABLE {table} AS {query}")
        except duckdb.Error as error:
            raise _not_computed(after, error) from None
        written = replace(after, stamp=stamp, changed=datetime.now(UTC))
        ledger.write_grid(engine, written)
        gone = {c.name for c in before.columns} - {c.name for c in after.columns}
        new = {c.name for c in after.columns} - {c.name for c in before.columns}
        ledger.log(engine, written.stamp, written.name, action, column=(gone | new).pop())
    return written


def _typed(engine: duckdb.DuckDBPyConnection, grid: Grid, column: Column) -> Column:
    """A computed column with the type that its expression has."""
    equip(engine, replace(grid, columns=(*grid.columns, column)))
    known = {one.name.casefold() for one in grid.columns}
    if column.name.casefold() in mentions_of(column.expression).names - known:
        raise MidspreadError(
            f"column: the columns of {grid.name} rest on one another in a circle "
            f"({column.name} → {column.name}); write one of them without the other."
        )
    try:
        rows = engine.execute(
            f"DESCRIBE SELECT ({column.expression}) AS v FROM {ledger.contents(grid.name)}"
        ).fetchall()
    except duckdb.Error as error:
        raise _not_computed(replace(grid, columns=(*grid.columns, column)), error) from None
    return replace(column, type=str(rows[0][1]))


def _not_computed(grid: Grid, error: duckdb.Error) -> MidspreadError:
    reason = str(error).split("\n", 1)[0].split(": ", 1)[-1].rstrip(".!")
    column = grid.columns[-1]
    return MidspreadError(
        f"column: {column.name} of {grid.name} cannot be computed as ({column.expression}): "
        f"{reason}; use columns of the grid, which are "
        f"{', '.join(one.name for one in grid.columns if one is not column)}."
    )
