"""Writing a grid's new contents to the store, the earlier ones kept as a version."""

from dataclasses import replace
from datetime import UTC, datetime
from typing import Final

import duckdb

from midspread.engine.errors import MidspreadError
from midspread.engine.grids import ledger
from midspread.engine.grids.computing import Computed
from midspread.engine.grids.keeping_versions import drop_versions, versions_kept
from midspread.engine.grids.model import RESULT, Column, ColumnKind, Grid
from midspread.engine.grids.restoring import note_undo
from midspread.engine.grids.tables import contents_query, key_text, versions_joined
from midspread.engine.store.quoting import literal, quoted

_SCRATCH: Final = "_midspread_result"


def publish(
    engine: duckdb.DuckDBPyConnection,
    command: str,
    before: Grid | None,
    grid: Grid,
    computed: Computed,
    cause: str,
) -> tuple[Grid, bool]:
    """Put what was computed in the place of a grid's contents.

    Parameters
    ----------
    engine : duckdb.DuckDBPyConnection
        Of the store, within `Store.writing`.
    command : str
        Who does it, for messages.
    before : Grid or None
        As it is, noted for `undo`; None when it is new.
    grid : Grid
        As it shall be, but for its derived columns, stamp, version, rows and record.
    computed : Computed
        Its new rows.
    cause : str
        Why, for the history.

    Returns
    -------
    tuple of (Grid, bool)
        The grid as written, and whether its contents are others than before.
    """
    engine.execute(f"ATTACH {literal(str(computed.path))} AS {_SCRATCH} (TYPE duckdb, READ_ONLY)")
    base = f"{_SCRATCH}.main.{RESULT}"
    derived = tuple(Column(name, kind, ColumnKind.DERIVED) for name, kind in computed.columns)
    added = tuple(c for c in grid.columns if c.kind is not ColumnKind.DERIVED)
    _check_columns(command, grid.name, derived, added)
    grid = replace(grid, columns=(*derived, *added))
    _check_keys(engine, command, grid, base)
    changed = grid.version == 0 or _differs(engine, grid, base)
    is_other_query = before is None or (before.sql, before.keys) != (grid.sql, grid.keys)
    now = datetime.now(UTC)
    written = replace(
        grid,
        rows=computed.rows,
        reads=computed.reads,
        record=computed.record,
        failure="",
    )
    if changed or is_other_query:
        stamp = ledger.next_stamp(engine)
        note_undo(engine, stamp, grid.name, before)
        if not changed:
            ledger.log(engine, stamp, grid.name, command, note=f"{cause}, with the same result")
    if changed:
        if grid.version > 0:
            _set_aside(engine, grid)
        written = replace(written, stamp=stamp, version=grid.version + 1, changed=now)
        engine.execute(
            f"CREATE OR REPLACE TABLE {ledger.contents(grid.name)} AS {contents_query(grid, base)}"
        )
        engine.execute(
            "INSERT INTO store.ledger.versions VALUES ($1, $2, $3, $4, $5, $6, $7, true)",
            [
                grid.name,
                written.version,
                now,
                cause,
                computed.rows,
                grid.sql,
                computed.record.to_json(),
            ],
        )
        ledger.log(engine, stamp, grid.name, command, new=str(written.version), note=cause)
    ledger.write_grid(engine, written)
    return written, changed


def _check_columns(
    command: str, grid: str, derived: tuple[Column, ...], added: tuple[Column, ...]
) -> None:
    taken = {column.name.casefold() for column in derived}
    for column in added:
        if column.name.casefold() in taken:
            raise MidspreadError(
                f"{command}: the query of {grid} now gives a column {column.name}, which is also "
                f"one that was added to it; rename it in the query, or drop the added one with "
                f"midspread column {grid} {column.name} --drop."
            )


def _check_keys(engine: duckdb.DuckDBPyConnection, command: str, grid: Grid, base: str) -> None:
    known = {column.name.casefold() for column in grid.of_kind(ColumnKind.DERIVED)}
    missing = [key for key in grid.keys if key.casefold() not in known]
    if missing:
        raise MidspreadError(
            f"{command}: the key column {missing[0]} is not among the columns of {grid.name}; "
            f"name others with --key, or add it to the query."
        )
    if not grid.keys:
        return
    listed = ", ".join(quoted(key) for key in grid.keys)
    twice = engine.execute(
        f"SELECT {key_text(grid.keys)} AS _m_key, _m_count FROM (SELECT {listed}, count(*) AS"
        f" _m_count FROM {base} GROUP BY {listed} HAVING count(*) > 1) ORDER BY _m_key LIMIT 1"
    ).fetchall()
    if twice:
        raise MidspreadError(
            f"{command}: {twice[0][1]} rows of {grid.name} have the key {twice[0][0]} "
            f"({', '.join(grid.keys)}), and a key must be there once; name more columns with --key."
        )


def _differs(engine: duckdb.DuckDBPyConnection, grid: Grid, base: str) -> bool:
    """Whether the new rows differ from the present ones in the derived columns."""
    described = engine.execute(f"DESCRIBE {ledger.contents(grid.name)}").fetchall()
    present = {str(row[0]): str(row[1]) for row in described}
    derived = grid.of_kind(ColumnKind.DERIVED)
    added = {c.name for c in grid.columns} - {c.name for c in derived}
    if [(c.name, c.type) for c in derived] != [
        (name, kind) for name, kind in present.items() if name not in added
    ]:
        return True
    listed = ", ".join(quoted(column.name) for column in derived)
    new, old = f"SELECT {listed} FROM {base}", f"SELECT {listed} FROM {ledger.contents(grid.name)}"
    if _gist(engine, new) != _gist(engine, old):
        return True
    # The same hashes in all likelihood mean the same rows, which is then made sure of.
    if grid.keys:
        rest = [quoted(column.name) for column in derived if column.name not in grid.keys]
        differing = " OR ".join(f"_o.{name} IS DISTINCT FROM _n.{name}" for name in rest)
        query = (
            f"SELECT EXISTS (FROM {versions_joined(f'({old})', f'({new})', grid.keys)}"
            f" WHERE _o._m_there IS NULL OR _n._m_there IS NULL{' OR ' if rest else ''}{differing})"
        )
    else:
        query = f"SELECT EXISTS (({new}) EXCEPT ALL ({old})) OR EXISTS (({old}) EXCEPT ALL ({new}))"
    return bool(engine.execute(query).fetchall()[0][0])


def _gist(engine: duckdb.DuckDBPyConnection, query: str) -> tuple[int, int]:
    """How many rows there are and the sum of their hashes: two passes tell most changes apart."""
    rows = engine.execute(
        f"SELECT count(*), coalesce(sum(hash(_r)::HUGEINT), 0) FROM ({query}) AS _r"
    ).fetchall()
    return int(rows[0][0]), int(rows[0][1])


def _set_aside(engine: duckdb.DuckDBPyConnection, grid: Grid) -> None:
    """Keep the present contents as an earlier version, and drop those beyond the number kept."""
    engine.execute(
        f"CREATE OR REPLACE TABLE {ledger.earlier(grid.name, grid.version)} AS "
        f"FROM {ledger.contents(grid.name)}"
    )
    drop_versions(engine, grid.name, grid.version - versions_kept(engine))
