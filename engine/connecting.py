"""One in-memory DuckDB connection with its limits, its scratch folder and its read-only sources."""

from collections.abc import Mapping
from pathlib import Path
from typing import Final

import duckdb

from midspread.engine.errors import MidspreadError, UsageError
from midspread.engine.parsing import literal, quoted
from midspread.engine.scratch import scratch_folder

_RESERVED: Final = ("main", "memory", "pg_catalog", "information_schema", "system", "temp")


def connect(*, memory: str | None, threads: int | None, owner: object) -> duckdb.DuckDBPyConnection:
    """Open a connection of our own.

    Parameters
    ----------
    memory : str, optional
        Most memory to use, such as ``4GB``.
    threads : int, optional
        How many threads compute.
    owner : object
        The scratch folder is removed with it.

    Raises
    ------
    UsageError
        When a limit is no limit.
    """
    scratch, _ = scratch_folder(owner)
    config: dict[str, str | bool | int | float | list[str]] = {
        "autoinstall_known_extensions": False,
        "autoload_known_extensions": False,
        "errors_as_json": True,
        "python_enable_replacements": False,
        "temp_directory": str(scratch),
    }
    if memory is not None:
        config["memory_limit"] = memory
    if threads is not None:
        if threads < 1:
            raise UsageError(f"--threads must be a whole number from 1 up, got {threads}.")
        config["threads"] = threads
    try:
        connection = duckdb.connect(":memory:", config=config)
    except duckdb.Error:
        if memory is None:
            raise
        raise UsageError(
            f"--memory must be an amount of memory, got {memory}; write for example 4GB."
        ) from None
    connection.execute("SET enable_progress_bar = true")
    connection.execute("SET enable_progress_bar_print = false")
    return connection


def checked_sources(sources: Mapping[str, Path]) -> dict[str, Path]:
    """The sources with absolute paths, once each is known to be a file under a name of its own.

    Raises
    ------
    UsageError
        When a name cannot be a source's name.
    MidspreadError
        When there is no such file.
    """
    checked: dict[str, Path] = {}
    for name, path in sources.items():
        if not name or name.lower() in (*_RESERVED, *(known.lower() for known in checked)):
            raise UsageError(
                f"--attach: {name or 'an empty text'} cannot name a source; choose another name."
            )
        if not path.is_file():
            what = "is a folder" if path.is_dir() else "does not exist"
            raise MidspreadError(f"--attach {name}: {path} {what}; give the path of a DuckDB file.")
        checked[name] = path.absolute()
    return checked


class Attachments:
    """The databases that a connection has attached, for reading only.

    Parameters
    ----------
    connection : duckdb.DuckDBPyConnection
        A session's.
    given : mapping of str to Path
        Those named for this session, attached when the first is needed.
    """

    def __init__(self, connection: duckdb.DuckDBPyConnection, given: Mapping[str, Path]) -> None:
        self._connection = connection
        self._given = given
        self._are_given_attached = False
        self._added: dict[str, Path] = {}

    def attach_given(self) -> None:
        """Attach those named for this session, once."""
        if not self._are_given_attached:
            for name, path in self._given.items():
                attach(self._connection, name, path)
            self._are_given_attached = True

    def is_given(self, folded: str) -> bool:
        """Whether this session was given a database of a name."""
        return folded in (name.casefold() for name in self._given)

    def add(self, name: str, path: Path) -> None:
        """Attach another, in place of what had its name before."""
        if self._added.get(name.casefold()) != path:
            self.drop(name)
            attach(self._connection, name, path, command=f"query: the source {name}")
            self._added[name.casefold()] = path

    def drop(self, name: str) -> None:
        """Let one that was added go."""
        if self._added.pop(name.casefold(), None) is not None:
            self._connection.execute(f"DETACH {quoted(name)}")


def attach(connection: duckdb.DuckDBPyConnection, name: str, path: Path, command: str = "") -> None:
    """Attach a source for reading only; `command` is who asks, for messages.

    Raises
    ------
    MidspreadError
        When the file is no DuckDB database, or another program is writing it.
    """
    try:
        connection.execute(f"ATTACH {literal(str(path))} AS {quoted(name)} (READ_ONLY)")
    except duckdb.Error as error:
        asking = command or f"--attach {name}"
        raise MidspreadError(f"{asking}: {_why_not_attached(path, str(error))}") from None


def _why_not_attached(path: Path, reason: str) -> str:
    if "not a valid DuckDB database" in reason:
        return f"{path} is not a DuckDB file; read other files in place: FROM '{path.name}'."
    if "lock" in reason.lower():
        return f"{path} is being written by another program; close it there, or attach a copy."
    if "Permission denied" in reason:
        return f"{path} cannot be read; you lack the permission."
    if "newer" in reason or "version" in reason:
        return f"{path} was written by a version of DuckDB that this one cannot read; convert it."
    return f"{path} cannot be opened as a DuckDB file; check the file."
