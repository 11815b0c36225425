"""What a store holds, whether it is sound, and giving back the room it no longer needs."""

import contextlib
import os
import secrets
from dataclasses import dataclass
from datetime import datetime, timedelta
from pathlib import Path

import duckdb

from midspread.engine.errors import StoreError
from midspread.engine.grids.keeping_versions import versions_kept
from midspread.engine.grids.upkeep import faults_of_grids, let_go
from midspread.engine.store.answers import EPOCH, Answers
from midspread.engine.store.layout import ALIAS, STORAGE_VERSION, shelf_table
from midspread.engine.store.quoting import literal, quoted
from midspread.engine.store.serialising import from_bytes
from midspread.engine.store.store import Store, remove_database


@dataclass(frozen=True)
class StoreReport:
    """A store's contents in figures.

    Attributes
    ----------
    path : Path
        The database file.
    file_bytes : int
        Its size, with the log beside it.
    answers : int
        Kept answers.
    answer_bytes : int
        What they take.
    limit_bytes : int
        What they may take.
    oldest, newest : datetime or None
        When the first and the last of them were kept, in UTC.
    made : str
        When the store was made.
    versions : int
        How many earlier versions of each grid it keeps.
    """

    path: Path
    file_bytes: int
    answers: int
    answer_bytes: int
    limit_bytes: int
    oldest: datetime | None
    newest: datetime | None
    made: str
    versions: int


def report(store: Store) -> StoreReport:
    """Count what a store holds.

    Parameters
    ----------
    store : Store
        The store.

    Returns
    -------
    StoreReport
    """
    with store.reading() as engine:
        count, size, oldest, newest = engine.execute(
            "SELECT count(*), coalesce(sum(bytes), 0)::BIGINT, epoch_us(min(kept)),"
            " epoch_us(max(kept)) FROM store.ledger.answers"
        ).fetchall()[0]
        made = engine.execute(
            "SELECT max(value) FROM store.ledger.about WHERE name = 'made'"
        ).fetchall()[0][0]
        versions = versions_kept(engine)
    return StoreReport(
        path=store.path,
        file_bytes=_file_bytes(store.path),
        answers=count,
        answer_bytes=size,
        limit_bytes=Answers(store).limit(),
        oldest=None if oldest is None else EPOCH + timedelta(microseconds=oldest),
        newest=None if newest is None else EPOCH + timedelta(microseconds=newest),
        made=made or "",
        versions=versions,
    )


def check(store: Store) -> list[str]:
    """Read everything a store holds and say what is wrong.

    Parameters
    ----------
    store : Store
        The store.

    Returns
    -------
    list of str
        One sentence for every fault; empty when the store is sound.

    Raises
    ------
    StoreDamaged
        When the file itself cannot be read.
    """
    faults: list[str] = []
    with store.reading() as engine:
        listed = engine.execute(
            "SELECT answer, key, shelf, row_count FROM store.ledger.answers ORDER BY answer"
        ).fetchall()
        shelves = _shelves(engine)
        for key, times in engine.execute(
            "SELECT key, count(*) FROM store.ledger.answers GROUP BY key HAVING count(*) > 1"
        ).fetchall():
            faults.append(f"Key {key} is kept {times} times.")
        for shelf in sorted(shelves - {row[2] for row in listed}):
            faults.append(f"Shelf {shelf} holds no answer that is listed.")
        for answer, _, shelf, rows in listed:
            if shelf not in shelves:
                faults.append(f"Answer {answer} has lost its shelf {shelf}.")
                continue
            fault = _fault_of(engine, answer, shelf, rows)
            if fault is not None:
                faults.append(fault)
        for shelf in sorted(shelves):
            strays = engine.execute(
                f"SELECT count(DISTINCT answer) FROM {shelf_table(shelf)} WHERE answer NOT IN"
                " (SELECT answer FROM store.ledger.answers WHERE shelf = $1)",
                [shelf],
            ).fetchall()[0][0]
            if strays:
                faults.append(f"Shelf {shelf} holds {strays} answers that are not listed.")
        faults += faults_of_grids(engine)
    return faults


def pack(store: Store) -> int:
    """Write a store anew without the room it no longer needs.

    What was discarded or could be undone is let go of. The new file takes the old one's place only
    when it is complete.

    Parameters
    ----------
    store : Store
        The store.

    Returns
    -------
    int
        Bytes given back.
    """
    fresh = store.path.with_name(f".{store.path.name}.{secrets.token_hex(6)}.new")
    before = _file_bytes(store.path)
    with store.writing() as engine:
        let_go(engine)
    with store.exclusively() as engine:
        try:
            _copy(engine, store.path, fresh)
            os.chmod(fresh, store.path.stat().st_mode & 0o7777)  # noqa: PTH101
            fresh.replace(store.path)
            store.path.with_name(store.path.name + ".wal").unlink(missing_ok=True)
        except (duckdb.Error, OSError) as error:
            raise store.error_of(error) from error
        finally:
            remove_database(fresh)
    return max(before - _file_bytes(store.path), 0)


def _copy(engine: duckdb.DuckDBPyConnection, path: Path, fresh: Path) -> None:
    engine.execute(f"ATTACH {literal(str(path))} AS {quoted(ALIAS)} (TYPE duckdb)")
    engine.execute(f"CHECKPOINT {quoted(ALIAS)}")
    engine.execute(
        f"ATTACH {literal(str(fresh))} AS fresh"
        f" (TYPE duckdb, STORAGE_VERSION {literal(STORAGE_VERSION)})"
    )
    engine.execute(f"COPY FROM DATABASE {quoted(ALIAS)} TO fresh")
    old, new = _contents(engine, ALIAS), _contents(engine, "fresh")
    engine.execute("DETACH fresh")
    engine.execute(f"DETACH {quoted(ALIAS)}")
    if old != new:
        raise StoreError(
            f"The store {path} was left as it is, because its packed copy lacks "
            f"{sorted(old ^ new)[0][1]}; please report this."
        )


def _contents(engine: duckdb.DuckDBPyConnection, database: str) -> set[tuple[str, str, int]]:
    """Everything in a database by kind and name; tables with their number of rows."""
    found: set[tuple[str, str, int]] = set()
    for schema, table in engine.execute(
        "SELECT schema_name, table_name FROM duckdb_tables() WHERE database_name = $1", [database]
    ).fetchall():
        name = f"{quoted(database)}.{quoted(schema)}.{quoted(table)}"
        rows = engine.execute(f"SELECT count(*) FROM {name}").fetchall()[0][0]
        found.add(("table", f"{schema}.{table}", rows))
    for kind, source, column in (
        ("view", "duckdb_views()", "view_name"),
        ("macro", "duckdb_functions()", "function_name"),
        ("index", "duckdb_indexes()", "index_name"),
        ("sequence", "duckdb_sequences()", "sequence_name"),
        ("type", "duckdb_types()", "type_name"),
    ):
        internal = "" if kind in ("index", "sequence") else " AND NOT internal"
        for schema, name, times in engine.execute(
            f"SELECT schema_name, {column}, count(*) FROM {source}"
            f" WHERE database_name = $1{internal} GROUP BY ALL",
            [database],
        ).fetchall():
            found.add((kind, f"{schema}.{name}", times))
    return found


def _file_bytes(path: Path) -> int:
    total = 0
    for name in (path.name, path.name + ".wal"):
        with contextlib.suppress(OSError):
            total += path.with_name(name).stat().st_size
    return total


def _shelves(engine: duckdb.DuckDBPyConnection) -> set[int]:
    rows = engine.execute(
        "SELECT table_name FROM duckdb_tables()"
        " WHERE database_name = $1 AND schema_name = 'answers' AND table_name LIKE 'shelf_%'",
        [ALIAS],
    ).fetchall()
    return {int(name.removeprefix("shelf_")) for (name,) in rows}


def _fault_of(engine: duckdb.DuckDBPyConnection, answer: int, shelf: int, rows: int) -> str | None:
    import pyarrow as pa

    parts = engine.execute(
        f"SELECT part, content FROM {shelf_table(shelf)} WHERE answer = $1 ORDER BY part", [answer]
    ).fetchall()
    if [part for part, _ in parts] != list(range(len(parts))) or not parts:
        return f"Answer {answer} has lost a part of its content."
    try:
        table = from_bytes(b"".join(content for _, content in parts))
    except (pa.ArrowException, OSError) as error:
        return f"Answer {answer} cannot be read ({error})."
    if table.num_rows != rows:
        return f"Answer {answer} has {table.num_rows} rows where {rows} were kept."
    return None
