"""Patterns of files, and the state of the files behind them."""

import os
import re
import stat
import sys
import time
from collections.abc import Iterable
from dataclasses import dataclass

import duckdb

_REMOTE = re.compile(r"^[a-z][a-z0-9+.-]*://", re.IGNORECASE)
_LOCAL_URL = re.compile(r"^file:", re.IGNORECASE)
_DATA_ENDINGS = frozenset(
    (".parquet", ".csv", ".tsv", ".txt", ".json", ".jsonl", ".ndjson", ".gz", ".zst", ".xlsx")
)
# A file changed twice within the grain of its file system's clock shows one time, so a change is
# only trusted when it is older than that. Grains are of some milliseconds, or else of whole seconds
# (2 s on FAT), which the missing fraction gives away.
FINE_GRAIN_NS = 100_000_000
COARSE_GRAIN_NS = 2_000_000_000
_SECOND_NS = 1_000_000_000


@dataclass(frozen=True, order=True)
class FileState:
    """What tells one state of a file from another.

    ``ctime_ns`` catches what ``mtime_ns`` misses: a program may set the latter back, never the
    former (except on Windows, where it is the time of creation).
    """

    path: str
    size: int
    mtime_ns: int
    ctime_ns: int
    inode: int

    @classmethod
    def of(cls, path: str) -> "FileState | None":
        """Look at a file; None when there is none."""
        try:
            found = os.stat(path)  # noqa: PTH116 (thousands of files: Path costs as much again)
        except (OSError, ValueError):
            return None
        return cls(path, found.st_size, found.st_mtime_ns, found.st_ctime_ns, found.st_ino)

    def settles_ns(self) -> int:
        """Give the time from which on any later change is bound to show."""
        changed = self.mtime_ns if sys.platform == "win32" else self.ctime_ns
        is_coarse = changed % _SECOND_NS == 0
        return changed + (COARSE_GRAIN_NS if is_coarse else FINE_GRAIN_NS)


@dataclass(frozen=True)
class Matched:
    """The files a pattern matched at one moment."""

    pattern: str
    files: tuple[FileState, ...]
    is_regular: bool = True


def is_remote(pattern: str) -> bool:
    """Whether a path leads to another machine."""
    return _REMOTE.match(pattern) is not None and _LOCAL_URL.match(pattern) is None


def match(pattern: str, connection: duckdb.DuckDBPyConnection) -> Matched:
    """Find the files behind a pattern as the engine does, and look at each.

    Parameters
    ----------
    pattern : str
        A path, a glob, or a folder, whose whole tree then counts.
    connection : duckdb.DuckDBPyConnection
        Whose rules for patterns hold.

    Returns
    -------
    Matched
        With no files where nothing matches.
    """
    if not pattern or "\x00" in pattern or len(pattern) > 4096:
        return Matched(pattern, ())
    folder = os.getcwd()  # noqa: PTH109
    plain = os.path.join(folder, os.path.expanduser(pattern))  # noqa: PTH111, PTH118
    paths = _glob(pattern, connection)
    regular = True
    try:
        mode = os.stat(plain).st_mode  # noqa: PTH116
    except OSError:
        pass
    else:
        if stat.S_ISDIR(mode):
            paths += _glob(os.path.join(plain, "**"), connection)  # noqa: PTH118
        elif not stat.S_ISREG(mode):
            regular = False
    absolute = (os.path.join(folder, path) for path in paths)  # noqa: PTH118
    return Matched(pattern, states(absolute), regular)


def states(paths: Iterable[str]) -> tuple[FileState, ...]:
    """Look at files, and at the write-ahead log beside any that may be a database."""
    found: set[FileState] = set()
    for path in paths:
        state = FileState.of(path)
        if state is not None:
            found.add(state)
            if os.path.splitext(path)[1].lower() not in _DATA_ENDINGS:  # noqa: PTH122
                log = FileState.of(path + ".wal")
                found |= {log} if log is not None else set()
    return tuple(sorted(found))


def now_ns() -> int:
    """Give the time files are compared with."""
    return time.time_ns()


def _glob(pattern: str, connection: duckdb.DuckDBPyConnection) -> list[str]:
    try:
        rows = connection.execute("SELECT file FROM glob($1)", [pattern]).fetchall()
    except duckdb.Error:
        return []
    return [path for (path,) in rows]
