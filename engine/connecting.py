"""One in-memory DuckDB connection with its limits, its scratch folder and its read-only sources."""

import shutil
import tempfile
import weakref
from collections.abc import Mapping
from pathlib import Path
from typing import Final

import duckdb

from midspread.engine.errors import MidspreadError, UsageError
from midspread.engine.parsing import literal, quoted

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
    scratch = Path(tempfile.mkdtemp(prefix="midspread-"))
    weakref.finalize(owner, shutil.rmtree, scratch, ignore_errors=True)
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


def attach(connection: duckdb.DuckDBPyConnection, name: str, path: Path) -> None:
    """Attach a source for reading only.

    Raises
    ------
    MidspreadError
        When the file is no DuckDB database, or another program is writing it.
    """
    try:
        connection.execute(f"ATTACH {literal(str(path))} AS {quoted(name)} (READ_ONLY)")
    except duckdb.Error as error:
        raise MidspreadError(f"--attach {name}: {_why_not_attached(path, str(error))}") from None


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
