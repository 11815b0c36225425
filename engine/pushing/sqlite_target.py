"""A SQLite file as a target, through Python's own sqlite3."""

import contextlib
import sqlite3
from collections.abc import Iterator
from pathlib import Path
from typing import Final

from midspread.engine.errors import MidspreadError
from midspread.engine.grids.sources import Source
from midspread.engine.parsing import quoted
from midspread.engine.pushing.duckdb_target import is_writable
from midspread.engine.pushing.rows import GridRows
from midspread.engine.pushing.target import (
    STAGED,
    Field,
    Place,
    Target,
    is_view,
    no_schema,
    refused_type,
    refused_value,
)

_WAIT_S: Final = 5.0
_INTEGERS: Final = frozenset(
    {"TINYINT", "SMALLINT", "INTEGER", "BIGINT", "UTINYINT", "USMALLINT", "UINTEGER"}
)
_LARGE_INTEGERS: Final = frozenset({"UBIGINT", "HUGEINT", "UHUGEINT"})
_FLOATS: Final = frozenset({"FLOAT", "DOUBLE"})
# Kept as the text that the engine writes: it has every digit, and sorts as the values do where
# they are dates and times. SQLite itself would turn a decimal number into a binary one.
_AS_TEXT: Final = ("VARCHAR", "ENUM", "UUID", "DATE", "TIME", "DECIMAL", "JSON")
_LARGEST: Final = 2**63 - 1


class SqliteTarget(Target):
    """See `Target`."""

    title = "SQLite"

    def __init__(self, connection: sqlite3.Connection) -> None:
        self._connection = connection

    def columns(self, place: Place) -> dict[str, str] | None:
        """Names and declared types of a table's columns."""
        if place.schema is not None and place.schema.casefold() != "main":
            raise no_schema(place)
        kinds = self._connection.execute(
            "SELECT type FROM main.sqlite_master WHERE lower(name) = lower(?)", [place.table]
        ).fetchall()
        if not kinds:
            return None
        if kinds[0][0] != "table":
            raise is_view(place)
        rows = self._connection.execute(
            "SELECT name, type FROM pragma_table_info(?, 'main')", [place.table]
        ).fetchall()
        return {str(name): str(kind) for name, kind in rows}

    def table(self, place: Place) -> str:
        """The table as SQL."""
        return f"main.{quoted(place.table)}"

    def type_of(self, field: Field) -> str:
        """The declared type."""
        if field.type in _INTEGERS | _LARGE_INTEGERS:
            return "INTEGER"
        if field.type == "BOOLEAN":
            return "BOOLEAN"
        if field.type in _FLOATS:
            return "REAL"
        if field.type == "BLOB":
            return "BLOB"
        if field.type.startswith(_AS_TEXT) and not field.type.endswith("]"):
            return "TEXT"
        raise refused_type(field, self.title)

    def accepts(self, found: str, field: Field) -> bool:
        """Whether a column of a declared type keeps what would be stored as it is."""
        wanted = self.type_of(field)
        affinity = _affinity(found)
        if affinity == "BLOB":  # stores whatever comes as it comes
            return True
        if wanted in ("INTEGER", "BOOLEAN"):
            return affinity in ("INTEGER", "NUMERIC")
        if wanted == "TEXT" and field.type.startswith(("DATE", "TIME")):
            return affinity == "TEXT" or found.upper().startswith(("DATE", "TIME"))
        return affinity == wanted or (wanted == "REAL" and affinity == "NUMERIC")

    def stage(self, rows: GridRows, keys: list[str]) -> str:
        """Copy the rows to a temporary table."""
        expressions = [self._expression(rows, field) for field in rows.fields]
        listed = ", ".join(f"{quoted(f.name)} {self.type_of(f)}" for f in rows.fields)
        self._connection.execute(f"CREATE TEMP TABLE {STAGED} ({listed})")
        marks = ", ".join("?" * len(rows.fields))
        for batch in rows.batches(expressions):
            values = [column.to_pylist() for column in batch.columns]
            self._connection.executemany(
                f"INSERT INTO temp.{STAGED} VALUES ({marks})", zip(*values, strict=True)
            )
        if keys:
            by = ", ".join(quoted(key) for key in keys)
            self._connection.execute(f"CREATE INDEX temp.{STAGED}_key ON {STAGED} ({by})")
        return f"temp.{STAGED}"

    def _expression(self, rows: GridRows, field: Field) -> str:
        """A column as what SQLite stores exactly."""
        name = quoted(field.name)
        kind = self.type_of(field)
        if field.type in _LARGE_INTEGERS:
            if rows.has(f"abs({name}::HUGEINT) > {_LARGEST}"):
                advice = "cast it to VARCHAR in the query"
                raise refused_value(field, "a whole number of over 64 bits", self.title, advice)
            return f"{name}::BIGINT AS {name}"
        if field.type in _FLOATS and rows.has(f"isnan({name})"):
            advice = "turn it into NULL in the query"
            raise refused_value(field, "NaN", self.title, advice)
        if kind == "TEXT":
            return f"{name}::VARCHAR AS {name}"
        return f"{name}::TINYINT AS {name}" if kind == "BOOLEAN" else name

    def run(self, sql: str) -> None:
        """Run a statement."""
        self._connection.execute(sql)

    def number(self, sql: str) -> int:
        """The one whole number that a query gives."""
        return int(self._connection.execute(sql).fetchone()[0])

    def same(self, theirs: str, ours: str, *, has_null: bool) -> str:
        """An equality that an index serves."""
        return f"{theirs} IS {ours}" if has_null else f"{theirs} = {ours}"

    def differs(self, theirs: str, ours: str) -> str:
        """The opposite."""
        return f"{theirs} IS NOT {ours}"

    def describe(self, place: Place, record: str, companion: list[str]) -> None:  # noqa: ARG002
        """As a row of the table of records: SQLite knows no comments."""
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
    source: Source,
    folder: Path,
    rows: GridRows,  # noqa: ARG001  as for every target
    *,
    reading: bool,
) -> Iterator[SqliteTarget]:
    """Open the file for the length of a block, which is one transaction.

    Raises
    ------
    MidspreadError
        When the file cannot be written, or refuses what is written.
    """
    path = source.file(folder)
    if not reading and not is_writable(path):
        raise MidspreadError(
            f"push: {path} is read-only; allow writing it, or push to another source."
        )
    address = f"{path.absolute().as_uri()}?mode={'ro' if reading else 'rw'}"
    connection: sqlite3.Connection | None = None
    try:
        connection = sqlite3.connect(
            address, uri=True, timeout=_WAIT_S, isolation_level=None, check_same_thread=False
        )
        connection.execute("BEGIN" if reading else "BEGIN IMMEDIATE")
        yield SqliteTarget(connection)
    except sqlite3.Error as error:
        raise MidspreadError(f"push: {_why(source.name, path, str(error))}") from None
    finally:
        if connection is not None:
            with contextlib.suppress(sqlite3.Error):
                connection.execute("ROLLBACK")
            connection.close()


def _why(name: str, path: Path, reason: str) -> str:
    if "locked" in reason or "busy" in reason:
        return f"{path} is in use by another program and is as it was; push again when it is free."
    if "readonly" in reason or "read-only" in reason or "unable to open" in reason:
        return f"{path} cannot be written; allow it, and writing in its folder."
    if "not a database" in reason or "malformed" in reason:
        return f"{path} is no longer a sound SQLite file; bring it back, or attach another."
    return f"{name} refused the rows ({reason}) and is as it was."


def _affinity(declared: str) -> str:
    """What SQLite makes of a declared type (its documentation, Datatypes, 3.1)."""
    upper = declared.upper()
    if "INT" in upper:
        return "INTEGER"
    if any(word in upper for word in ("CHAR", "CLOB", "TEXT")):
        return "TEXT"
    if "BLOB" in upper or not upper:
        return "BLOB"
    if any(word in upper for word in ("REAL", "FLOA", "DOUB")):
        return "REAL"
    return "NUMERIC"
