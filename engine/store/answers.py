"""Kept answers: found by key, kept with what they rest on, dropped by last use."""

import contextlib
import os
import re
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from functools import cached_property
from importlib.metadata import PackageNotFoundError, version
from typing import TYPE_CHECKING

import duckdb

from midspread.engine.errors import StoreError, UsageError
from midspread.engine.store.layout import creating_shelf, shelf_table
from midspread.engine.store.serialising import from_bytes, to_bytes
from midspread.engine.store.store import Store

if TYPE_CHECKING:
    import pyarrow as pa

DEFAULT_LIMIT = 1 << 30
LIMIT_VARIABLE = "MIDSPREAD_ANSWERS_LIMIT"
LIMIT_SETTING = "answers_limit"
# One answer must not push most others out.
LARGEST_SHARE = 4
# A use younger than this is as good as now: noting every one would make a writer of every reader.
USE_GRAIN = timedelta(minutes=1)
_SHELF_BYTES = 2 << 20
_PART_BYTES = 16 << 20
EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
_SIZE = re.compile(r"^\s*(\d+(?:\.\d+)?)\s*([kmgt]?)(i?)b?\s*$", re.IGNORECASE)


@dataclass(frozen=True)
class KeptAnswer:
    """An answer from the store.

    Attributes
    ----------
    sql : str
        The query as it was asked.
    kept : datetime
        When it was kept, in UTC.
    row_count : int
        Its rows.
    inputs : str
        What it rests on, as handed over when it was kept.
    content : bytes
        The table as bytes; :attr:`table` reads it.
    """

    sql: str
    kept: datetime
    row_count: int
    inputs: str
    content: bytes

    @cached_property
    def table(self) -> "pa.Table":
        """The answer: same types, order and bits."""
        return from_bytes(self.content)


def size_of(text: str, where: str) -> int:
    """Read a size such as ``500 MB`` or ``2GiB``; plain digits are bytes.

    Parameters
    ----------
    text : str
        The size.
    where : str
        Where it was given, for the error.

    Returns
    -------
    int
        Bytes.
    """
    found = _SIZE.match(text)
    if found is None:
        raise UsageError(
            f"{where} is {text!r}, which is no size; write digits and a unit, such as 500MB or "
            "2GiB, or 0 to keep no answers."
        )
    number, unit, binary = found.groups()
    base = 1024 if binary else 1000
    return int(float(number) * base ** " kmgt".index(unit.lower() or " "))


class Answers:
    """The answers in a store.

    Parameters
    ----------
    store : Store
        The store.
    environment : mapping, optional
        Environment variables; by default those of the process.
    """

    def __init__(self, store: Store, environment: Mapping[str, str] | None = None) -> None:
        self.store = store
        self._environment = os.environ if environment is None else environment

    def find(self, key: str) -> KeptAnswer | None:
        """Look an answer up; noting the use never makes anybody wait.

        Parameters
        ----------
        key : str
            The key it was kept under.

        Returns
        -------
        KeptAnswer or None
        """
        with self.store.reading() as engine:
            rows = engine.execute(
                "SELECT answer, shelf, sql, row_count, epoch_us(kept), epoch_us(last_used)"
                " FROM store.ledger.answers WHERE key = $1 ORDER BY answer DESC LIMIT 1",
                [key],
            ).fetchall()
            if not rows:
                return None
            answer, shelf, sql, row_count, kept_us, used_us = rows[0]
            parts = engine.execute(
                f"SELECT inputs, content FROM {shelf_table(shelf)} WHERE answer = $1 ORDER BY part",
                [answer],
            ).fetchall()
        if not parts:
            return None
        self._note_use(answer, EPOCH + timedelta(microseconds=used_us))
        return KeptAnswer(
            sql=sql,
            kept=EPOCH + timedelta(microseconds=kept_us),
            row_count=row_count,
            inputs=parts[0][0] or "",
            content=b"".join(content for _, content in parts),
        )

    def keep(
        self, key: str, sql: str, table: "pa.Table", inputs: str = "", limit: int | None = None
    ) -> bool:
        """Keep an answer, dropping those unused for longest where the limit demands it.

        Parameters
        ----------
        key : str
            Digest of the query and all it rests on. An answer under the same key is replaced.
        sql : str
            The query as the user wrote it.
        table : pyarrow.Table
            The answer.
        inputs : str
            What it rests on, for people and later commands to read.
        limit : int, optional
            Bytes all answers may take together; by default :meth:`limit`.

        Returns
        -------
        bool
            False when the answer takes more than a quarter of the limit, and is not kept.
        """
        content = to_bytes(table)
        size = len(content) + len(inputs.encode()) + len(sql.encode())
        if limit is None:
            limit = self._named_limit()
        if limit is not None and size * LARGEST_SHARE > limit:
            return False  # without touching the store
        with self.store.writing() as engine:
            most = _stored_limit(engine) if limit is None else limit
            if size * LARGEST_SHARE > most:
                return False
            _drop(engine, "key = $1", [key])
            _make_room(engine, most - size)
            answer = _next_number(engine)
            shelf = _open_shelf(engine, answer)
            engine.execute(
                "INSERT INTO store.ledger.answers"
                " SELECT $answer, $key, $sql, now(), now(), $rows, $bytes, $shelf, $version",
                {
                    "answer": answer,
                    "key": key,
                    "sql": sql,
                    "rows": table.num_rows,
                    "bytes": size,
                    "shelf": shelf,
                    "version": _own_version(),
                },
            )
            for part, start in enumerate(range(0, len(content), _PART_BYTES)):
                engine.execute(
                    f"INSERT INTO {shelf_table(shelf)} VALUES ($1, $2, $3, $4)",
                    [
                        answer,
                        part,
                        inputs if part == 0 else None,
                        content[start : start + _PART_BYTES],
                    ],
                )
        return True

    def clear(self) -> int:
        """Drop every kept answer.

        Returns
        -------
        int
            How many there were.
        """
        with self.store.writing() as engine:
            return _drop(engine, "true", [])

    def size_bytes(self) -> int:
        """Bytes that all kept answers take."""
        return self._total("sum(bytes)")

    def count(self) -> int:
        """How many answers are kept."""
        return self._total("count(*)")

    def limit(self) -> int:
        """Bytes that all answers may take: MIDSPREAD_ANSWERS_LIMIT, the store's setting, 1 GiB."""
        named = self._named_limit()
        if named is not None:
            return named
        with self.store.reading() as engine:
            return _stored_limit(engine)

    def set_limit(self, size: int) -> None:
        """Set the store's limit, and drop what exceeds it.

        Parameters
        ----------
        size : int
            Bytes; 0 keeps no answers.
        """
        with self.store.writing() as engine:
            engine.execute("DELETE FROM store.ledger.about WHERE name = $1", [LIMIT_SETTING])
            engine.execute(
                "INSERT INTO store.ledger.about VALUES ($1, $2)", [LIMIT_SETTING, str(size)]
            )
            _make_room(engine, size)

    def _named_limit(self) -> int | None:
        named = self._environment.get(LIMIT_VARIABLE, "").strip()
        return size_of(named, LIMIT_VARIABLE) if named else None

    def _total(self, expression: str) -> int:
        with self.store.reading() as engine:
            total: int = engine.execute(
                f"SELECT coalesce({expression}, 0)::BIGINT FROM store.ledger.answers"
            ).fetchall()[0][0]
            return total

    def _note_use(self, answer: int, last_used: datetime) -> None:
        if datetime.now(UTC) - last_used < USE_GRAIN:
            return
        with contextlib.suppress(StoreError), self.store.writing(wait_s=0) as engine:
            engine.execute(
                "UPDATE store.ledger.answers SET last_used = now() WHERE answer = $1", [answer]
            )


def _own_version() -> str | None:
    try:
        return version("midspread")
    except PackageNotFoundError:
        return None


def _stored_limit(engine: duckdb.DuckDBPyConnection) -> int:
    rows = engine.execute(
        "SELECT value FROM store.ledger.about WHERE name = $1", [LIMIT_SETTING]
    ).fetchall()
    return size_of(rows[0][0], f"The store's {LIMIT_SETTING}") if rows else DEFAULT_LIMIT


def _make_room(engine: duckdb.DuckDBPyConnection, size: int) -> None:
    """Drop the answers unused for longest until the others fit into a size."""
    rows = engine.execute(
        "SELECT answer FROM (SELECT answer, sum(bytes) OVER"
        " (ORDER BY last_used DESC, answer DESC) AS with_newer FROM store.ledger.answers)"
        " WHERE with_newer > $1",
        [max(size, 0)],
    ).fetchall()
    for (answer,) in rows:
        _drop(engine, "answer = $1", [answer])


def _drop(
    engine: duckdb.DuckDBPyConnection, condition: str, parameters: list[str] | list[int]
) -> int:
    rows = engine.execute(
        f"DELETE FROM store.ledger.answers WHERE {condition} RETURNING answer, shelf", parameters
    ).fetchall()
    for shelf in sorted({shelf for _, shelf in rows}):
        left = engine.execute(
            "SELECT count(*) FROM store.ledger.answers WHERE shelf = $1", [shelf]
        ).fetchall()[0][0]
        if left:
            dropped = [answer for answer, on in rows if on == shelf]
            engine.execute(
                f"DELETE FROM {shelf_table(shelf)} WHERE answer IN (SELECT unnest($1))", [dropped]
            )
        else:
            engine.execute(f"DROP TABLE {shelf_table(shelf)}")
    return len(rows)


def _next_number(engine: duckdb.DuckDBPyConnection) -> int:
    """Give a number never given before in this store."""
    number: int = engine.execute(
        "UPDATE store.ledger.about SET value = (value::BIGINT + 1)::VARCHAR WHERE name = 'numbered'"
        " RETURNING value::BIGINT"
    ).fetchall()[0][0]
    return number


def _open_shelf(engine: duckdb.DuckDBPyConnection, number: int) -> int:
    """Give a shelf with room; a new one of the given number where all are full."""
    rows = engine.execute(
        "SELECT shelf FROM store.ledger.answers GROUP BY shelf HAVING sum(bytes) < $1"
        " ORDER BY shelf DESC LIMIT 1",
        [_SHELF_BYTES],
    ).fetchall()
    if rows:
        shelf: int = rows[0][0]
        return shelf
    engine.execute(creating_shelf(number))
    return number
