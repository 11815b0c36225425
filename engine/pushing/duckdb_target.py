"""A DuckDB file as a target: attached to the connection that holds the rows."""

import contextlib
import os
import stat
from collections.abc import Iterator
from pathlib import Path
from typing import Final

import duckdb

from midspread.engine.errors import MidspreadError
from midspread.engine.grids.sources import Source
from midspread.engine.parsing import literal, quoted
from midspread.engine.pushing.recording import is_ours
from midspread.engine.pushing.rows import GridRows
from midspread.engine.pushing.target import Field, Place, Target, is_view, no_schema

_ALIAS: Final = "_midspread_target"
# What each type holds exactly, besides itself.
_NARROWER: Final = {
    "SMALLINT": {"TINYINT", "UTINYINT"},
    "INTEGER": {"TINYINT", "UTINYINT", "SMALLINT", "USMALLINT"},
    "BIGINT": {"TINYINT", "UTINYINT", "SMALLINT", "USMALLINT", "INTEGER", "UINTEGER"},
    "HUGEINT": {
        *("TINYINT", "UTINYINT", "SMALLINT", "USMALLINT", "INTEGER", "UINTEGER"),
        *("BIGINT", "UBIGINT"),
    },
    "DOUBLE": {"FLOAT", "TINYINT", "UTINYINT", "SMALLINT", "USMALLINT", "INTEGER", "UINTEGER"},
    "TIMESTAMP": {"DATE", "TIMESTAMP_S", "TIMESTAMP_MS"},
}


class DuckdbTarget(Target):
    """See `Target`; it holds every type of the engine, being one."""

    title = "DuckDB"

    def __init__(self, connection: duckdb.DuckDBPyConnection) -> None:
        self._connection = connection

    def columns(self, place: Place) -> dict[str, str] | None:
        """Names and types of a table's columns."""
        run = self._connection.execute
        schema = place.schema or "main"
        if not run(
            "SELECT 1 FROM duckdb_schemas() WHERE database_name = $1"
            " AND lower(schema_name) = lower($2)",
            [_ALIAS, schema],
        ).fetchall():
            raise no_schema(place)
        where = "database_name = $1 AND lower(schema_name) = lower($2) AND lower({}) = lower($3)"
        given = [_ALIAS, schema, place.table]
        if run(f"SELECT 1 FROM duckdb_views() WHERE {where.format('view_name')}", given).fetchall():
            raise is_view(place)
        rows = run(
            "SELECT column_name, data_type FROM duckdb_columns()"
            f" WHERE {where.format('table_name')} ORDER BY column_index",
            given,
        ).fetchall()
        return {str(name): str(kind) for name, kind in rows} or None

    def table(self, place: Place) -> str:
        """The table as SQL."""
        return f"{_ALIAS}.{quoted(place.schema or 'main')}.{quoted(place.table)}"

    def type_of(self, field: Field) -> str:
        """The same type."""
        return field.type

    def accepts(self, found: str, field: Field) -> bool:
        """Whether it is the same type or a wider one."""
        return found == field.type or field.type in _NARROWER.get(found, ())

    def stage(self, rows: GridRows, keys: list[str]) -> str:  # noqa: ARG002
        """They are beside it already."""
        return rows.table

    def run(self, sql: str) -> None:
        """Run a statement."""
        self._connection.execute(sql).fetchall()

    def number(self, sql: str) -> int:
        """The one whole number that a query gives."""
        return int(self._connection.execute(sql).fetchall()[0][0])

    def same(self, theirs: str, ours: str, *, has_null: bool) -> str:
        """An equality that the engine can hash."""
        return f"{theirs} IS NOT DISTINCT FROM {ours}" if has_null else f"{theirs} = {ours}"

    def differs(self, theirs: str, ours: str) -> str:
        """The opposite."""
        return f"{theirs} IS DISTINCT FROM {ours}"

    def describe(self, place: Place, record: str, companion: list[str]) -> None:
        """As the table's comment, unless it has one that somebody wrote."""
        rows = self._connection.execute(
            "SELECT comment FROM duckdb_tables() WHERE database_name = $1"
            " AND lower(schema_name) = lower($2) AND lower(table_name) = lower($3)",
            [_ALIAS, place.schema or "main", place.table],
        ).fetchall()
        if rows[0][0] is None or is_ours(str(rows[0][0])):
            self.run(f"COMMENT ON TABLE {self.table(place)} IS {literal(record)}")
            return
        for statement in companion:
            self.run(statement)

    def commit(self) -> None:
        """Make everything lasting."""
        self._connection.execute("COMMIT")

    def stop(self) -> None:
        """Ask the running statement to end."""
        self._connection.interrupt()


@contextlib.contextmanager
def opened(
    source: Source, folder: Path, rows: GridRows, *, reading: bool
) -> Iterator[DuckdbTarget]:
    """Attach the file for the length of a block, which is one transaction.

    Raises
    ------
    MidspreadError
        When the file cannot be written, or refuses what is written.
    """
    path, connection = source.file(folder), rows.connection
    if not reading and not is_writable(path):
        raise MidspreadError(
            f"push: {path} is read-only; allow writing it, or push to another source."
        )
    mode = "READ_ONLY" if reading else "READ_WRITE"
    try:
        connection.execute(f"ATTACH {literal(str(path))} AS {_ALIAS} (TYPE duckdb, {mode})")
    except duckdb.Error as error:
        raise MidspreadError(f"push: {_why_closed(path, str(error))}") from None
    try:
        connection.execute("BEGIN")
        yield DuckdbTarget(connection)
    except duckdb.Error as error:
        first = str(error).split("\n", 1)[0].rstrip(".")
        raise MidspreadError(
            f"push: {source.name} refused the rows ({first}) and is as it was."
        ) from None
    finally:
        with contextlib.suppress(duckdb.Error):
            connection.execute("ROLLBACK")
        with contextlib.suppress(duckdb.Error):  # what is committed stands in the log beside it
            connection.execute(f"DETACH {_ALIAS}")


def is_writable(path: Path) -> bool:
    """Whether its owner means it to be written; the system would let an administrator anyway."""
    writing = stat.S_IWUSR | stat.S_IWGRP | stat.S_IWOTH
    return bool(path.stat().st_mode & writing) and os.access(path, os.W_OK)


def _why_closed(path: Path, reason: str) -> str:
    lower = reason.casefold()
    if "lock" in lower or "already attached" in lower or "used by another process" in lower:
        return f"{path} is in use by another program; close it there and push again."
    if "permission" in lower or "read-only" in lower or "access is denied" in lower:
        return f"{path} cannot be written; allow it, or push to another source."
    if "not a valid duckdb database" in lower:
        return f"{path} is no longer a DuckDB file; bring it back, or attach another."
    return f"{path} cannot be opened as a DuckDB file ({reason.splitlines()[0].rstrip('.')})."
