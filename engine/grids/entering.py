"""`enter`: values that people type, checked, logged and never lost."""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from pathlib import Path

import duckdb

from midspread.engine.errors import MidspreadError, UsageError
from midspread.engine.grids import ledger
from midspread.engine.grids.definitions import listed_columns
from midspread.engine.grids.given import GIVEN, KEY, columns_given, count_new, load, no_such_row
from midspread.engine.grids.keeping import folder_of
from midspread.engine.grids.model import Column, ColumnKind, Grid, GridKind, checked_name
from midspread.engine.grids.restoring import note_rows, note_undo
from midspread.engine.grids.sources import check_free
from midspread.engine.grids.tables import computing_steps, key_text
from midspread.engine.nearest import did_you_mean, nearest
from midspread.engine.store.quoting import quoted
from midspread.engine.store.store import Store, writing


@dataclass(frozen=True)
class Entered:
    """What `enter` did.

    Attributes
    ----------
    grid : Grid
        As it is now.
    new : int
        Rows that were not there.
    cells : int
        Cells whose value is another now.
    """

    grid: Grid
    new: int
    cells: int


def create(store_path: Path, name: str, columns: str, keys: Sequence[str]) -> Grid:
    """Make an empty grid of typed-in values.

    Parameters
    ----------
    store_path : Path
        The store, made when it is missing.
    name : str
        Of the grid.
    columns : str
        Names and types with commas between them.
    keys : sequence of str
        The columns that tell its rows apart.
    """
    checked_name("enter", name)
    store = Store.open(store_path)
    try:
        with store.writing() as engine:
            check_free("enter", engine, name)
            if name.casefold() in ledger.grids(engine):
                raise MidspreadError(
                    f"enter: there is a grid {name} already; type values into it, or add a column "
                    f"with midspread column {name}."
                )
            made = listed_columns(engine, "enter", columns)
            known = {column.name.casefold(): column.name for column in made}
            for key in keys:
                if key.casefold() not in known:
                    raise UsageError(
                        f"enter: --key names {key}, which is not among the columns "
                        f"({', '.join(known.values())}); name one of them."
                    )
            stamp = ledger.next_stamp(engine)
            note_undo(engine, stamp, name, None)
            grid = Grid(
                name=name,
                kind=GridKind.ENTERED,
                keys=tuple(known[key.casefold()] for key in keys),
                columns=made,
                stamp=stamp,
                version=1,
                changed=datetime.now(UTC),
                folder=folder_of(store.path),
            )
            listed = ", ".join(f"{quoted(column.name)} {column.type}" for column in made)
            engine.execute(f"CREATE TABLE {ledger.contents(name)} ({listed})")
            ledger.write_grid(engine, grid)
            ledger.log(engine, stamp, name, "created")
    finally:
        store.close()
    return grid


def enter(
    store_path: Path,
    name: str,
    columns: Sequence[str],
    rows: Sequence[Sequence[str | None]],
    note: str = "",
) -> Entered:
    """Set cells of rows, found by their key; rows of an entered grid are made where missing.

    Parameters
    ----------
    store_path : Path
        The store.
    name : str
        Of the grid.
    columns : sequence of str
        What the values are for; the key's columns must be among them.
    rows : sequence of sequence of str or None
        The values as text, None for NULL; an empty text is an empty text.
    note : str
        Kept beside each change.

    Raises
    ------
    MidspreadError
        With one sentence; nothing is changed then.
    """
    with writing(store_path) as engine:
        grid = grid_to_enter(engine, name)
        chosen = columns_given(grid, columns)
        load(engine, grid, chosen, rows)
        new = count_new(engine, grid)
        if grid.kind is GridKind.DERIVED and new:
            raise no_such_row(engine, grid)
        stamp = ledger.next_stamp(engine)
        cells = _log_cells(engine, stamp, grid, chosen, note)
        if not (new or cells):  # what rests on the grid stays fresh
            if note:
                _log_note(engine, stamp, grid, note)
            return Entered(grid, 0, 0)
        note_rows(engine, stamp, grid, GIVEN, KEY)
        if grid.kind is GridKind.DERIVED:
            _write_entries(engine, grid, chosen, note)
        _write_rows(engine, grid, chosen)
        _compute(engine, grid)
        written = replace(grid, stamp=stamp, changed=datetime.now(UTC), rows=grid.rows + new)
        ledger.write_grid(engine, written)
    return Entered(written, new, cells)


def delete(
    store_path: Path,
    name: str,
    columns: Sequence[str],
    values: Sequence[str | None],
    note: str = "",
) -> Grid:
    """Remove the row of a key from an entered grid."""
    with writing(store_path) as engine:
        grid = grid_to_enter(engine, name)
        if grid.kind is GridKind.DERIVED:
            raise MidspreadError(
                f"enter: the rows of {grid.name} come from its query; change that with "
                f"midspread keep {grid.name} --replace."
            )
        chosen = columns_given(grid, columns)
        if {c.name for c in chosen} != set(grid.keys):
            raise UsageError(
                f"enter: --delete takes the key and nothing else; write "
                f"{' '.join(f'{key}=…' for key in grid.keys)}."
            )
        load(engine, grid, chosen, [values])
        if count_new(engine, grid):
            raise no_such_row(engine, grid)
        stamp = ledger.next_stamp(engine)
        note_rows(engine, stamp, grid, GIVEN, KEY)
        table = ledger.contents(grid.name)
        engine.execute(
            f"INSERT INTO store.ledger.changes SELECT $1, now(), $2, 'deleted',"
            f" {key_text(grid.keys, '_m_row')}, '', to_json(_m_row)::VARCHAR, NULL, $3"
            f" FROM {table} AS _m_row WHERE {key_text(grid.keys, '_m_row')}"
            f" IN (SELECT {KEY} FROM {GIVEN})",
            [stamp, grid.name, note],
        )
        engine.execute(
            f"DELETE FROM {table} WHERE {key_text(grid.keys)} IN (SELECT {KEY} FROM {GIVEN})"
        )
        written = replace(grid, stamp=stamp, changed=datetime.now(UTC), rows=grid.rows - 1)
        ledger.write_grid(engine, written)
    return written


def grid_to_enter(engine: duckdb.DuckDBPyConnection, name: str) -> Grid:
    """The grid of a name, when it takes typed-in values."""
    grids = ledger.grids(engine)
    grid = grids.get(name.casefold())
    if grid is None:
        meant = nearest(name, [one.name for one in grids.values()])
        hint = did_you_mean(meant, f"make it with midspread enter {name} --columns.")
        raise MidspreadError(f"enter: there is no grid {name}; {hint}")
    if not grid.of_kind(ColumnKind.ENTERED):
        raise MidspreadError(
            f"enter: {grid.name} has no column to type into; add one with midspread column "
            f'{grid.name} "remark TEXT".'
        )
    if not grid.keys:
        raise MidspreadError(
            f"enter: {grid.name} has no key, so its rows cannot be told apart; name one with "
            f"midspread keep {grid.name} --replace --key."
        )
    return grid


def _log_cells(
    engine: duckdb.DuckDBPyConnection,
    stamp: int,
    grid: Grid,
    columns: Sequence[Column],
    note: str,
) -> int:
    """Note every cell whose value will be another, and new rows without values; how many cells."""
    cells = 0
    for column in columns:
        if column.name in grid.keys:
            continue
        name = quoted(column.name)
        rows = engine.execute(
            f"INSERT INTO store.ledger.changes SELECT $1, now(), $2, 'entered', _m_new.{KEY}, $3,"
            f" CAST(_m_old.{name} AS VARCHAR), CAST(_m_new.{name} AS VARCHAR), $4"
            f" FROM {GIVEN} AS _m_new LEFT JOIN {ledger.contents(grid.name)} AS _m_old"
            f" ON {key_text(grid.keys, '_m_old')} = _m_new.{KEY}"
            f" WHERE _m_old.{name} IS DISTINCT FROM _m_new.{name}",
            [stamp, grid.name, column.name, note],
        ).fetchall()
        cells += int(rows[0][0])
    engine.execute(
        f"INSERT INTO store.ledger.changes SELECT $1, now(), $2, 'entered', {KEY}, '', NULL, NULL,"
        f" $3 FROM {GIVEN} WHERE {KEY} NOT IN (SELECT {key_text(grid.keys)} FROM"
        f" {ledger.contents(grid.name)}) AND {KEY} NOT IN"
        " (SELECT key FROM store.ledger.changes WHERE stamp = $1)",
        [stamp, grid.name, note],
    )
    return cells


def _log_note(engine: duckdb.DuckDBPyConnection, stamp: int, grid: Grid, note: str) -> None:
    """Note what was written beside values that were there already."""
    engine.execute(
        f"INSERT INTO store.ledger.changes SELECT $1, now(), $2, 'noted', {KEY}, '', NULL, NULL, $3"
        f" FROM {GIVEN}",
        [stamp, grid.name, note],
    )


def _write_entries(
    engine: duckdb.DuckDBPyConnection, grid: Grid, columns: Sequence[Column], note: str
) -> None:
    """Keep the values by their rows' keys, so that they outlive the rows."""
    for column in columns:
        if column.name in grid.keys:
            continue
        engine.execute(
            "DELETE FROM store.ledger.entries WHERE lower(grid) = lower($1)"
            f" AND lower(name) = lower($2) AND key IN (SELECT {KEY} FROM {GIVEN})",
            [grid.name, column.name],
        )
        engine.execute(
            f"INSERT INTO store.ledger.entries SELECT $1, {KEY}, $2,"
            f" CAST({quoted(column.name)} AS VARCHAR), $3, now() FROM {GIVEN}"
            f" WHERE {quoted(column.name)} IS NOT NULL",
            [grid.name, column.name, note],
        )


def _write_rows(engine: duckdb.DuckDBPyConnection, grid: Grid, columns: Sequence[Column]) -> None:
    table = ledger.contents(grid.name)
    changed = [column for column in columns if column.name not in grid.keys]
    if changed:
        settings = ", ".join(f"{quoted(c.name)} = _m_new.{quoted(c.name)}" for c in changed)
        engine.execute(
            f"UPDATE {table} AS _m_row SET {settings} FROM {GIVEN} AS _m_new"
            f" WHERE {key_text(grid.keys, '_m_row')} = _m_new.{KEY}"
        )
    if grid.kind is GridKind.ENTERED:
        names = ", ".join(quoted(column.name) for column in columns)
        engine.execute(
            f"INSERT INTO {table} ({names}) SELECT {names} FROM {GIVEN} WHERE {KEY} NOT IN"
            f" (SELECT {key_text(grid.keys)} FROM {table})"
        )


def _compute(engine: duckdb.DuckDBPyConnection, grid: Grid) -> None:
    """Compute the rows' other columns again, each after those it rests on."""
    for step in computing_steps(engine, grid):
        engine.execute(f"{step} WHERE {key_text(grid.keys)} IN (SELECT {KEY} FROM {GIVEN})")
