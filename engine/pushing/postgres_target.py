"""A PostgreSQL database as a target, through its ADBC driver.

User and password come from libpq's own environment variables (PGUSER, PGPASSWORD, PGPASSFILE);
nothing of them is stored or printed.
"""

import contextlib
import re
from collections.abc import Iterator
from pathlib import Path
from typing import Any, Final

from midspread.engine.errors import MidspreadError
from midspread.engine.grids.sources import Source
from midspread.engine.parsing import literal, quoted
from midspread.engine.pushing.recording import is_ours
from midspread.engine.pushing.rows import GridRows
from midspread.engine.pushing.target import (
    STAGED,
    CommitUnknown,
    Field,
    Place,
    Target,
    is_view,
    no_schema,
    refused_type,
)

_CONNECT_S: Final = 10
_LOCK_WAIT: Final = "10s"
_LONGEST_NAME: Final = 63
# Types that travel as they are.
_NATIVE: Final = {
    "BOOLEAN": "boolean",
    "TINYINT": "smallint",
    "UTINYINT": "smallint",
    "SMALLINT": "smallint",
    "USMALLINT": "integer",
    "INTEGER": "integer",
    "UINTEGER": "bigint",
    "BIGINT": "bigint",
    "FLOAT": "real",
    "DOUBLE": "double precision",
    "VARCHAR": "text",
    "BLOB": "bytea",
}
# Types that travel as text, of which the database makes its own, digit by digit.
_BY_TEXT: Final = {
    "UBIGINT": "numeric(20,0)",
    "HUGEINT": "numeric(39,0)",
    "UHUGEINT": "numeric(39,0)",
    "DATE": "date",
    "TIME": "time without time zone",
    "TIMESTAMP": "timestamp without time zone",
    "TIMESTAMP_S": "timestamp without time zone",
    "TIMESTAMP_MS": "timestamp without time zone",
    "TIMESTAMP WITH TIME ZONE": "timestamp with time zone",
    "INTERVAL": "interval",
    "UUID": "uuid",
    "JSON": "text",
}
_DECIMAL: Final = re.compile(r"DECIMAL\((\d+),(\d+)\)")
_NUMERIC: Final = re.compile(r"numeric\((\d+),(\d+)\)")
_WIDER: Final = {
    "smallint": {"integer", "bigint", "numeric", "real", "double precision"},
    "integer": {"bigint", "numeric", "double precision"},
    "bigint": {"numeric"},
    "real": {"double precision"},
}
_LOST: Final = ("57P01", "57P02", "57P03", "08000", "08003", "08006", "25P03", "57P05")
_LOST_WORDS: Final = (
    "server closed the connection",
    "no connection to the server",
    "connection not open",
    "terminating connection",
    "could not receive data",
    "could not send data",
    "connection reset",
    "broken pipe",
    "ssl connection has been closed",
)


class PostgresTarget(Target):
    """See `Target`."""

    title = "PostgreSQL"

    def __init__(self, connection: Any) -> None:
        self._connection = connection
        self._cursor = connection.cursor()

    def columns(self, place: Place) -> dict[str, str] | None:
        """Names and types of a table's columns."""
        schema = "current_schema()" if place.schema is None else literal(place.schema)
        if place.schema is not None and not self.number(
            f"SELECT count(*) FROM pg_catalog.pg_namespace WHERE nspname = {schema}"
        ):
            raise no_schema(place)
        found = self._rows(
            "SELECT c.oid::bigint, c.relkind::text FROM pg_catalog.pg_class AS c"
            " JOIN pg_catalog.pg_namespace AS n ON n.oid = c.relnamespace"
            f" WHERE n.nspname = {schema} AND c.relname = {literal(place.table)}"
        )
        if not found:
            return None
        oid, kind = found[0]
        if kind not in ("r", "p"):
            raise is_view(place)
        rows = self._rows(
            "SELECT attname::text, format_type(atttypid, atttypmod) FROM pg_catalog.pg_attribute"
            f" WHERE attrelid = {oid} AND attnum > 0 AND NOT attisdropped ORDER BY attnum"
        )
        return {str(name): str(found_type) for name, found_type in rows}

    def table(self, place: Place) -> str:
        """The table as SQL."""
        _check_length(place.table)
        before = "" if place.schema is None else f"{quoted(place.schema)}."
        return f"{before}{quoted(place.table)}"

    def type_of(self, field: Field) -> str:
        """The type there."""
        _check_length(field.name)
        inner = field.type.removesuffix("[]")
        if inner in _NATIVE:
            return _NATIVE[inner] + ("[]" if inner != field.type else "")
        if field.type in _BY_TEXT:
            return _BY_TEXT[field.type]
        if found := _DECIMAL.fullmatch(field.type):
            return f"numeric({found[1]},{found[2]})"
        if field.type.startswith("ENUM(") and not field.type.endswith("]"):
            return "text"
        raise refused_type(field, self.title)

    def accepts(self, found: str, field: Field) -> bool:
        """Whether a type there holds all values of ours."""
        wanted = self.type_of(field)
        if found == wanted or found in _WIDER.get(wanted, ()):
            return True
        if wanted == "text":
            return found.startswith("character varying")
        ours, theirs = _NUMERIC.fullmatch(wanted), _NUMERIC.fullmatch(found)
        if ours and theirs:
            (p, s), (q, t) = map(int, ours.groups()), map(int, theirs.groups())
            return t >= s and q - t >= p - s
        return bool(ours) and found == "numeric"

    def stage(self, rows: GridRows, keys: list[str]) -> str:
        """Copy the rows to a temporary table, and have the types made there that travel as text."""
        travelling = [field for field in rows.fields if field.type.removesuffix("[]") in _NATIVE]
        expressions = [
            quoted(f.name) if f in travelling else f"{quoted(f.name)}::VARCHAR AS {quoted(f.name)}"
            for f in rows.fields
        ]
        self._cursor.adbc_ingest(STAGED, rows.batches(expressions), mode="create", temporary=True)
        staged = f"pg_temp.{quoted(STAGED)}"
        made = [
            f"ALTER COLUMN {quoted(f.name)} TYPE {self.type_of(f)}"
            f" USING {quoted(f.name)}::{self.type_of(f)}"
            for f in rows.fields
            if f not in travelling and self.type_of(f) != "text"
        ]
        if made:
            self.run(f"ALTER TABLE {staged} {', '.join(made)}")
        if keys:
            self.run(f"ANALYZE {staged}")
        return staged

    def run(self, sql: str) -> None:
        """Run a statement."""
        self._cursor.execute(sql)

    def number(self, sql: str) -> int:
        """The one whole number that a query gives."""
        return int(self._rows(sql)[0][0])

    def same(self, theirs: str, ours: str, *, has_null: bool) -> str:
        """An equality that the database can hash; it cannot hash IS NOT DISTINCT FROM."""
        if not has_null:
            return f"{theirs} = {ours}"
        return (
            f"(coalesce({theirs}::text, '') = coalesce({ours}::text, '')"
            f" AND ({theirs} IS NULL) = ({ours} IS NULL))"
        )

    def differs(self, theirs: str, ours: str) -> str:
        """The opposite."""
        return f"{theirs} IS DISTINCT FROM {ours}"

    def lock(self, place: Place) -> None:
        """Keep others from writing to the table until the transaction ends."""
        self.run(f"LOCK TABLE {self.table(place)} IN SHARE ROW EXCLUSIVE MODE")

    def describe(self, place: Place, record: str, companion: list[str]) -> None:
        """As the table's comment, unless it has one that somebody wrote."""
        name = literal(self.table(place))
        comment = self._rows(f"SELECT obj_description({name}::regclass, 'pg_class')")[0][0]
        if comment is None or is_ours(str(comment)):
            self.run(f"COMMENT ON TABLE {self.table(place)} IS {literal(record)}")
            return
        for statement in companion:
            self.run(statement)

    def commit(self) -> None:
        """Make everything lasting.

        Raises
        ------
        CommitUnknown
            When the connection is lost before the answer.
        """
        try:
            self._connection.commit()
        except Exception as error:
            if _is_lost(error):
                raise CommitUnknown(
                    "push: the connection was lost while the push was being confirmed, so that it "
                    "may have arrived; look into the table before you push again."
                ) from None
            raise

    def stop(self) -> None:
        """Ask the running statement to end."""
        with contextlib.suppress(Exception):
            self._connection.adbc_cancel()

    def _rows(self, sql: str) -> list[Any]:
        self._cursor.execute(sql)
        return list(self._cursor.fetchall())


@contextlib.contextmanager
def opened(
    source: Source,
    folder: Path,  # noqa: ARG001  as for every target
    rows: GridRows,  # noqa: ARG001
    *,
    reading: bool,
) -> Iterator[PostgresTarget]:
    """Connect for the length of a block, which is one transaction.

    Raises
    ------
    MidspreadError
        When the database cannot be reached, or refuses what is written.
    """
    try:
        from adbc_driver_manager import Error
        from adbc_driver_postgresql import dbapi
    except ImportError:
        raise MidspreadError(
            "push: the driver for PostgreSQL is not installed; install it with "
            'pip install "midspread[postgres]".'
        ) from None
    connection = None
    try:
        connection = dbapi.connect(_with_timeout(source.path))
        with connection.cursor() as cursor:
            cursor.execute(f"SET LOCAL lock_timeout = '{_LOCK_WAIT}'")
            cursor.execute("SET LOCAL standard_conforming_strings = on")
            if reading:  # a temporary table may be made all the same
                cursor.execute("SET LOCAL transaction_read_only = off")
        yield PostgresTarget(connection)
    except Error as error:
        raise MidspreadError(f"push: {_why(source, error, connection is None)}") from None
    finally:
        if connection is not None:
            with contextlib.suppress(Exception):
                connection.rollback()
            with contextlib.suppress(Exception):
                connection.close()


def _with_timeout(uri: str) -> str:
    if "connect_timeout=" in uri:
        return uri
    return f"{uri}{'&' if '?' in uri else '?'}connect_timeout={_CONNECT_S}"


def _is_lost(error: Exception) -> bool:
    text = str(error).casefold()
    return getattr(error, "sqlstate", None) in _LOST or any(words in text for words in _LOST_WORDS)


def _why(source: Source, error: Exception, is_connecting: bool) -> str:
    reason = _reason(str(error))
    if is_connecting:
        return (
            f"{source.name} cannot be reached at {source.path} ({reason}); check the address, and "
            f"PGUSER and PGPASSWORD in the environment."
        )
    if _is_lost(error):
        return (
            f"the connection to {source.name} was lost ({reason}), and it is as it was; push again "
            f"when it is back."
        )
    state = getattr(error, "sqlstate", None)
    if state == "55P03":
        return f"the table is locked by another session of {source.name}; push again when it ends."
    if state in ("42501", "25006"):
        return f"{source.name} does not allow writing ({reason}) and is as it was."
    return f"{source.name} refused the rows ({reason}) and is as it was."


def _reason(text: str) -> str:
    """The database's own sentence in a driver's message, without what surrounds it."""
    found = re.search(r"(?:ERROR|FATAL):\s+(.*)", text) or re.search(r"failed: (.*)", text)
    first = found[1] if found else text.split("[libpq] ", 1)[-1]
    return first.strip().splitlines()[0].rstrip(".") if first.strip() else "without a reason"


def _check_length(name: str) -> None:
    if len(name.encode()) > _LONGEST_NAME:
        raise MidspreadError(
            f"push: {name} is longer than the {_LONGEST_NAME} letters that PostgreSQL takes for a "
            f"name; shorten it."
        )
