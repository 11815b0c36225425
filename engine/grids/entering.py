"""`enter`: values that people type, checked, logged and never lost."""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from pathlib import Path
from typing import Final

import duckdb

from midspread.engine.errors import MidspreadError, UsageError
from midspread.engine.grids import ledger
from midspread.engine.grids.definitions import listed_columns
from midspread.engine.grids.keeping import folder_of
from midspread.engine.grids.model import Column, ColumnKind, Grid, GridKind, checked_name
from midspread.engine.grids.restoring import note_rows, note_undo
from midspread.engine.grids.sources import check_no_source
from midspread.engine.grids.tables import computed_in_order, key_text
from midspread.engine.nearest import nearest
from midspread.engine.store.quoting import quoted
from midspread.engine.store.store import Store

_GIVEN: Final = "temp.main._m_given"
_KEY: Final = "_m_key"


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
            check_no_source("enter", engine, name)
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
            note_undo(engine, name, None)
            grid = Grid(
                name=name,
                kind=GridKind.ENTERED,
                keys=tuple(known[key.casefold()] for key in keys),
                columns=made,
                stamp=ledger.next_stamp(engine),
                version=1,
                changed=datetime.now(UTC),
                folder=folder_of(store.path),
            )
            listed = ", ".join(f"{quoted(column.name)} {column.type}" for column in made)
            engine.execute(f"CREATE TABLE {ledger.contents(name)} ({listed})")
            ledger.write_grid(engine, grid)
            ledger.log(engine, grid.stamp, name, "created")
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
    store = Store.open(store_path, create=False)
    try:
        with store.writing() as engine:
            grid = grid_to_enter(engine, name)
            chosen = _columns(grid, columns)
            _load(engine, grid, chosen, rows)
            new = _count_new(engine, grid)
            if grid.kind is GridKind.DERIVED and new:
                raise _no_such_row(engine, grid)
            stamp = note_rows(engine, grid, _GIVEN, _KEY)
            cells = _log_cells(engine, stamp, grid, chosen, note)
            if grid.kind is GridKind.DERIVED:
                _write_entries(engine, grid, chosen, note)
            _write_rows(engine, grid, chosen)
            _compute(engine, grid)
            written = replace(grid, stamp=stamp, changed=datetime.now(UTC), rows=grid.rows + new)
            ledger.write_grid(engine, written)
    finally:
        store.close()
    return Entered(written, new, cells)


def delete(
    store_path: Path,
    name: str,
    columns: Sequence[str],
    values: Sequence[str | None],
    note: str = "",
) -> Grid:
    """Remove the row of a key from an entered grid."""
    store = Store.open(store_path, create=False)
    try:
        with store.writing() as engine:
            grid = grid_to_enter(engine, name)
            if grid.kind is GridKind.DERIVED:
                raise MidspreadError(
                    f"enter: the rows of {grid.name} come from its query; change that with "
                    f"midspread keep {grid.name} --replace."
                )
            chosen = _columns(grid, columns)
            if {c.name for c in chosen} != set(grid.keys):
                raise UsageError(
                    f"enter: --delete takes the key and nothing else; write "
                    f"{' '.join(f'{key}=…' for key in grid.keys)}."
                )
            _load(engine, grid, chosen, [values])
            if _count_new(engine, grid):
                raise _no_such_row(engine, grid)
            stamp = note_rows(engine, grid, _GIVEN, _KEY)
            table = ledger.contents(grid.name)
            engine.execute(
                f"INSERT INTO store.ledger.changes SELECT $1, now(), $2, 'deleted',"
                f" {key_text(grid.keys, '_m_row')}, '', to_json(_m_row)::VARCHAR, NULL, $3"
                f" FROM {table} AS _m_row WHERE {key_text(grid.keys, '_m_row')}"
                f" IN (SELECT {_KEY} FROM {_GIVEN})",
                [stamp, grid.name, note],
            )
            engine.execute(
                f"DELETE FROM {table} WHERE {key_text(grid.keys)} IN (SELECT {_KEY} FROM {_GIVEN})"
            )
            written = replace(grid, stamp=stamp, changed=datetime.now(UTC), rows=grid.rows - 1)
            ledger.write_grid(engine, written)
    finally:
        store.close()
    return written


def grid_to_enter(engine: duckdb.DuckDBPyConnection, name: str) -> Grid:
    """The grid of a name, when it takes typed-in values."""
    grids = ledger.grids(engine)
    grid = grids.get(name.casefold())
    if grid is None:
        meant = nearest(name, [one.name for one in grids.values()])
        hint = (
            f"did you mean {meant}?" if meant else f"make it with midspread enter {name} --columns."
        )
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


def _columns(grid: Grid, names: Sequence[str]) -> list[Column]:
    """The columns that are given, when they may be typed in and the key is among them."""
    chosen: list[Column] = []
    keys = {key.casefold() for key in grid.keys}
    for name in names:
        column = grid.column(name)
        if column is None:
            meant = nearest(name, [c.name for c in grid.columns])
            hint = f"did you mean {meant}?" if meant else f"it has {_listed(grid.columns)}."
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


def _load(
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
        f"CREATE OR REPLACE TEMP TABLE _m_given AS SELECT *, {key_text(grid.keys)} AS {_KEY}"
        f" FROM (SELECT {typed} FROM temp.main._m_texts)"
    )
    twice = engine.execute(
        f"SELECT {_KEY} FROM {_GIVEN} GROUP BY ALL HAVING count(*) > 1 LIMIT 1"
    ).fetchall()
    if twice:
        raise MidspreadError(
            f"enter: the key {twice[0][0]} ({', '.join(grid.keys)}) is given twice; give it once."
        )


def _count_new(engine: duckdb.DuckDBPyConnection, grid: Grid) -> int:
    """How many of the given rows are not there yet."""
    rows = engine.execute(
        f"SELECT count(*) FROM {_GIVEN} WHERE {_KEY} NOT IN"
        f" (SELECT {key_text(grid.keys)} FROM {ledger.contents(grid.name)})"
    ).fetchall()
    return int(rows[0][0])


def _no_such_row(engine: duckdb.DuckDBPyConnection, grid: Grid) -> MidspreadError:
    keys = engine.execute(
        f"SELECT {_KEY} FROM {_GIVEN} WHERE {_KEY} NOT IN (SELECT {key_text(grid.keys)}"
        f" FROM {ledger.contents(grid.name)}) ORDER BY ALL LIMIT 1"
    ).fetchall()
    return MidspreadError(
        f"enter: {grid.name} has no row with the key {keys[0][0]} ({', '.join(grid.keys)}); "
        f"midspread show {grid.name} lists those it has."
    )


def _log_cells(
    engine: duckdb.DuckDBPyConnection,
    stamp: int,
    grid: Grid,
    columns: Sequence[Column],
    note: str,
) -> int:
    """Note every cell whose value will be another; how many."""
    cells = 0
    for column in columns:
        if column.name in grid.keys:
            continue
        name = quoted(column.name)
        rows = engine.execute(
            f"INSERT INTO store.ledger.changes SELECT $1, now(), $2, 'entered', _m_new.{_KEY}, $3,"
            f" CAST(_m_old.{name} AS VARCHAR), CAST(_m_new.{name} AS VARCHAR), $4"
            f" FROM {_GIVEN} AS _m_new LEFT JOIN {ledger.contents(grid.name)} AS _m_old"
            f" ON {key_text(grid.keys, '_m_old')} = _m_new.{_KEY}"
            f" WHERE _m_old.{name} IS DISTINCT FROM _m_new.{name}",
            [stamp, grid.name, column.name, note],
        ).fetchall()
        cells += int(rows[0][0])
    if cells == 0:
        ledger.log(engine, stamp, grid.name, "entered", note=note)
    return cells


def _write_entries(
    engine: duckdb.DuckDBPyConnection, grid: Grid, columns: Sequence[Column], note: str
) -> None:
    """Keep the values by their rows' keys, so that they outlive the rows."""
    for column in columns:
        if column.name in grid.keys:
            continue
        engine.execute(
            "DELETE FROM store.ledger.entries WHERE lower(grid) = lower($1)"
            f" AND lower(name) = lower($2) AND key IN (SELECT {_KEY} FROM {_GIVEN})",
            [grid.name, column.name],
        )
        engine.execute(
            f"INSERT INTO store.ledger.entries SELECT $1, {_KEY}, $2,"
            f" CAST({quoted(column.name)} AS VARCHAR), $3, now() FROM {_GIVEN}"
            f" WHERE {quoted(column.name)} IS NOT NULL",
            [grid.name, column.name, note],
        )


def _write_rows(engine: duckdb.DuckDBPyConnection, grid: Grid, columns: Sequence[Column]) -> None:
    table = ledger.contents(grid.name)
    changed = [column for column in columns if column.name not in grid.keys]
    if changed:
        settings = ", ".join(f"{quoted(c.name)} = _m_new.{quoted(c.name)}" for c in changed)
        engine.execute(
            f"UPDATE {table} AS _m_row SET {settings} FROM {_GIVEN} AS _m_new"
            f" WHERE {key_text(grid.keys, '_m_row')} = _m_new.{_KEY}"
        )
    if grid.kind is GridKind.ENTERED:
        names = ", ".join(quoted(column.name) for column in columns)
        engine.execute(
            f"INSERT INTO {table} ({names}) SELECT {names} FROM {_GIVEN} WHERE {_KEY} NOT IN"
            f" (SELECT {key_text(grid.keys)} FROM {table})"
        )


def _compute(engine: duckdb.DuckDBPyConnection, grid: Grid) -> None:
    """Compute the rows' other columns again, each after those it rests on."""
    for step in computing_steps(engine, grid):
        engine.execute(f"{step} WHERE {key_text(grid.keys)} IN (SELECT {_KEY} FROM {_GIVEN})")


def computing_steps(engine: duckdb.DuckDBPyConnection, grid: Grid) -> list[str]:
    """Statements that compute the computed columns of all rows; a WHERE may follow."""
    ordered = computed_in_order(grid)
    if ordered:
        equip(engine, grid)
    return [
        f"UPDATE {ledger.contents(grid.name)} SET {quoted(column.name)} = ({column.expression})"
        for column in ordered
    ]


def equip(engine: duckdb.DuckDBPyConnection, grid: Grid) -> None:
    """Register our functions where a computed column of a grid calls one."""
    from midspread.udfs import functions

    text = " ".join(column.expression for column in grid.columns).lower()
    if any(name in text for name in functions()):
        from midspread.udfs import register

        register(engine)
