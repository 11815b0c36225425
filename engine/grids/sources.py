"""Databases that a store remembers by name, to read from and to push to."""

import os
import re
from collections.abc import Iterable
from dataclasses import dataclass
from enum import StrEnum
from pathlib import Path
from typing import Final
from urllib.parse import parse_qsl, urlsplit

import duckdb

from midspread.engine.errors import MidspreadError, UsageError
from midspread.engine.grids import ledger
from midspread.engine.grids.restoring import write_steps
from midspread.engine.inputs.scanning import mentions_of
from midspread.engine.store.quoting import literal
from midspread.engine.store.store import Store, reading, writing

_RESERVED: Final = frozenset(
    {"main", "memory", "temp", "system", "store", "pg_catalog", "information_schema", "scratch"}
)
_NAME: Final = re.compile(r"[^\W\d]\w*")
_URI: Final = re.compile(r"postgres(ql)?://", re.IGNORECASE)
_ANY_URI: Final = re.compile(r"[a-z][a-z0-9+.-]+://", re.IGNORECASE)
_SECRETS: Final = frozenset({"password", "sslpassword"})
_DUCKDB_MARK: Final = b"DUCK"
_DUCKDB_MARK_AT: Final = 8
_SQLITE_MARK: Final = b"SQLite format 3\0"
_SQLITE_ENDINGS: Final = frozenset({".sqlite", ".sqlite3", ".db", ".db3"})


class SourceKind(StrEnum):
    """What kind of database a source is."""

    DUCKDB = "duckdb"
    SQLITE = "sqlite"
    POSTGRES = "postgresql"


TITLES: Final = {
    SourceKind.DUCKDB: "DuckDB",
    SourceKind.SQLITE: "SQLite",
    SourceKind.POSTGRES: "PostgreSQL",
}


@dataclass(frozen=True)
class Source:
    """A remembered database.

    Attributes
    ----------
    name : str
        As the user wrote it; compared without regard to case.
    path : str
        Of its file, relative to the store's folder where that is possible, or its URI.
    kind : SourceKind
        What it is.
    """

    name: str
    path: str
    kind: SourceKind

    @property
    def folded(self) -> str:
        """The name in the form that names are compared in."""
        return self.name.casefold()

    def file(self, store_folder: Path) -> Path:
        """Where its file is."""
        return Path(os.path.normpath(store_folder / self.path))


@dataclass(frozen=True)
class Attached:
    """What `attach` did: the source as it is now, and as it was remembered before."""

    source: Source
    before: Source | None


def sources(engine: duckdb.DuckDBPyConnection) -> dict[str, Source]:
    """Every remembered source by folded name, within `Store.reading`."""
    rows = engine.execute(
        "SELECT name, path, kind FROM store.ledger.sources ORDER BY lower(name)"
    ).fetchall()
    found = [Source(name, path, SourceKind(kind)) for name, path, kind in rows]
    return {source.folded: source for source in found}


def remembered(store_path: Path) -> dict[str, Source]:
    """Every source that a store remembers, by folded name; none when there is no store."""
    if not store_path.exists():
        return {}
    with reading(store_path) as engine:
        return sources(engine)


def attach(store_path: Path, name: str, given: str) -> Attached:
    """Remember a source, or point a remembered one elsewhere.

    Parameters
    ----------
    store_path : Path
        The store, made when it is missing.
    name : str
        The name of the source.
    given : str
        The path of a DuckDB or SQLite file, or the URI of a PostgreSQL database.

    Raises
    ------
    MidspreadError
        With one sentence; the store is as it was.
    """
    _check_name(name)
    where = _checked_uri(name, given) if _ANY_URI.match(given) else _checked_file(name, given)
    store = Store.open(store_path)
    try:
        with store.writing() as engine:
            grid = ledger.grids(engine).get(name.casefold())
            if grid is not None:
                raise UsageError(
                    f"attach: {grid.name} is a grid of this store; choose another name for the "
                    f"source."
                )
            source = _as_source(name, where, store.path)
            before = sources(engine).get(name.casefold())
            if before != source:
                _remember(engine, name, before, source)
    finally:
        store.close()
    return Attached(source, before)


def remove(store_path: Path, name: str) -> Source:
    """Forget a source; the database itself is left as it is."""
    with writing(store_path) as engine:
        before = found_source("attach", sources(engine), name)
        _remember(engine, before.name, before, None)
    return before


def found_source(command: str, known: dict[str, Source], name: str) -> Source:
    """The source of a name.

    Raises
    ------
    MidspreadError
        When none is remembered under it.
    """
    source = known.get(name.casefold())
    if source is None:
        there = ", ".join(one.name for one in known.values())
        hint = f"there are {there}" if there else "there is none yet"
        raise MidspreadError(
            f"{command}: no source is remembered as {name}, {hint}; "
            f"midspread attach {name}=PATH remembers one."
        )
    return source


def trouble(source: Source, store_folder: Path) -> str:
    """Why a query cannot read a source, as a sentence without its subject; empty when it can."""
    if source.kind is not SourceKind.DUCKDB:
        title = TITLES[source.kind]
        return f"is a {title} database, to which grids are pushed and from which no query reads"
    return "" if source.file(store_folder).is_file() else gone(source, store_folder)


def gone(source: Source, store_folder: Path) -> str:
    """Say that a source's file is not where it was, as a sentence without its subject."""
    return (
        f"was remembered as {source.file(store_folder)}, where there is no file now; point it to "
        f"where that is with midspread attach {source.name}=PATH"
    )


def mentioned(store_path: Path, scripts: Iterable[str]) -> dict[str, Path]:
    """The files of the sources that some scripts mention and that can be read, by name."""
    words: set[str] = set()
    for script in scripts:
        words |= mentions_of(script).names
    return {
        source.name: source.file(store_path.parent)
        for folded, source in remembered(store_path).items()
        if folded in words and not trouble(source, store_path.parent)
    }


def check_free(command: str, engine: duckdb.DuckDBPyConnection, name: str) -> None:
    """Raise when a new grid's name is that of a source or a word of SQL; within `Store.reading`."""
    is_word = engine.execute(
        "SELECT 1 FROM duckdb_keywords() WHERE keyword_name = lower($1)"
        " AND keyword_category IN ('reserved', 'type_function')",
        [name],
    ).fetchall()
    if is_word:
        raise UsageError(
            f"{command}: {name} is a word of SQL, so that FROM {name} would not be understood; "
            f"choose another, for example {name}_grid."
        )
    source = sources(engine).get(name.casefold())
    if source is not None:
        raise UsageError(
            f"{command}: {source.name} is a source of this store; choose another name for the grid."
        )


def _remember(
    engine: duckdb.DuckDBPyConnection, name: str, before: Source | None, source: Source | None
) -> None:
    stamp = ledger.next_stamp(engine)
    forget = f"DELETE FROM store.ledger.sources WHERE lower(name) = lower({literal(name)})"
    engine.execute(forget)
    if source is not None:
        engine.execute(_insert(source))
    write_steps(engine, stamp, name, [forget, *([_insert(before)] if before else [])])
    ledger.log(
        engine,
        stamp,
        name,
        "attach" if source else "attach --remove",
        old=before.path if before else None,
        new=source.path if source else None,
    )


def _insert(source: Source) -> str:
    values = ", ".join(literal(text) for text in (source.name, source.path, source.kind))
    return f"INSERT INTO store.ledger.sources (name, path, kind) VALUES ({values})"


def _check_name(name: str) -> None:
    if not _NAME.fullmatch(name):
        raise UsageError(
            f"attach: a source's name is letters, digits and underscores, got {name!r}; write for "
            f"example wh=warehouse.duckdb."
        )
    if name.casefold() in _RESERVED or name.startswith("_"):
        raise UsageError(
            f"attach: {name} is a name of the engine's own; choose another for the source."
        )


def _checked_uri(name: str, uri: str) -> str:
    """A URI without a secret in it; none is ever printed, as it may hold one."""
    if not _URI.match(uri):
        raise UsageError(
            f"attach: {name} must be a file or a postgresql:// address, got one of another kind "
            f"({uri.partition(':')[0]}://); databases of that kind cannot be attached."
        )
    try:
        parts = urlsplit(uri)
        has_secret = parts.password is not None
        asked = {key.casefold() for key, _ in parse_qsl(parts.query, keep_blank_values=True)}
    except ValueError:
        raise UsageError(
            f"attach: the address of {name} cannot be read; write for example "
            f"{name}=postgresql://host:5432/database."
        ) from None
    if has_secret or asked & _SECRETS:
        raise UsageError(
            f"attach: the address of {name} holds a password, which is never stored; leave it out "
            f"and give it in the environment, as PGPASSWORD or in the file that PGPASSFILE names."
        )
    return uri


def _checked_file(name: str, given: str) -> Path:
    path = Path(given).expanduser()
    if not path.is_file():
        what = "is a folder" if path.is_dir() else "does not exist"
        raise MidspreadError(
            f"attach: {path} {what}; give {name} the path of a DuckDB or SQLite file, or an "
            f"address postgresql://host:5432/database."
        )
    # Links to folders are followed, as the path is kept relative to the store's folder; a link to
    # the file itself is kept, for it may be there to lead elsewhere tomorrow.
    return Path(os.path.realpath(path.parent)) / path.name


def _as_source(name: str, where: str | Path, store_path: Path) -> Source:
    if isinstance(where, str):
        return Source(name, where, SourceKind.POSTGRES)
    if where.samefile(store_path):
        raise UsageError(
            f"attach: {where} is the store itself, whose grids are there by name; give {name} "
            f"another file."
        )
    try:
        path = os.path.relpath(where, store_path.parent)
    except ValueError:  # another drive
        path = str(where)
    return Source(name, path, _kind_of(name, where))


def _kind_of(name: str, path: Path) -> SourceKind:
    try:
        with path.open("rb") as file:
            start = file.read(len(_SQLITE_MARK))
    except OSError as error:
        reason = (error.strerror or "the system refused").lower()
        raise MidspreadError(
            f"attach: {path} cannot be read ({reason}); allow reading it, then attach {name}."
        ) from None
    if start[_DUCKDB_MARK_AT : _DUCKDB_MARK_AT + len(_DUCKDB_MARK)] == _DUCKDB_MARK:
        return SourceKind.DUCKDB
    if start == _SQLITE_MARK or (not start and path.suffix.lower() in _SQLITE_ENDINGS):
        return SourceKind.SQLITE
    raise MidspreadError(
        f"attach: {path} is neither a DuckDB nor a SQLite file; read other files in place: FROM "
        f"'{path.name}'."
    )
