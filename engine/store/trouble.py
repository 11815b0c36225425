"""What went wrong with a store, in words."""

from pathlib import Path

import duckdb

from midspread.engine.errors import NotAStore, StoreDamaged, StoreError, StoreTooNew
from midspread.engine.store.locking import busy, not_writable

_FULL = ("no space left", "file too large", "disk quota", "disk full", "not enough space")
_FORBIDDEN = ("permission denied", "read-only file system", "access is denied")
_BROKEN = ("corrupt", "checksum", "could not read", "deserializ", "invalidated", "replay")
_HELD = ("set lock on file", "already attached", "already open", "used by another process")


def as_store_error(path: Path, error: Exception) -> StoreError:
    """Turn an error of the engine or the system about a store into ours."""
    if isinstance(error, StoreError):
        return error
    text = str(error)
    lower = text.casefold()
    if any(words in lower for words in _FULL):
        return StoreError(
            f"The disk is too full for the store {path}, which is as it was; make room, "
            "or name a store on another disk with --store."
        )
    if any(words in lower for words in _FORBIDDEN):
        return not_writable(path)
    if is_held(error):
        return busy(path)
    if "version number" in lower or "newer version" in lower:
        return StoreTooNew(
            f"The store {path} was written by a newer database engine; update DuckDB "
            "(pip install --upgrade duckdb), or name another store with --store."
        )
    if "not a valid duckdb database" in lower:
        return not_a_store(path, "is some other file")
    if isinstance(error, OSError):
        return StoreError(f"The store {path} could not be written: {error.strerror}.")
    first_line = text.splitlines()[0].rstrip(".") if text else type(error).__name__
    broken = isinstance(error, duckdb.InternalException | duckdb.FatalException)
    if broken or any(words in lower for words in _BROKEN):
        return damaged(path, first_line)
    return StoreError(f"The store {path} could not be used: {first_line}.")


def damaged(path: Path, why: str) -> StoreDamaged:
    return StoreDamaged(
        f"The store {path} is damaged and was left as it is ({why}); restore a copy, or "
        "move it away and the next query makes a new one."
    )


def not_a_store(path: Path, why: str) -> NotAStore:
    return NotAStore(
        f"{path} {why}, not a store of Midspread, and was left as it is; name another "
        "path with --store or MIDSPREAD_STORE."
    )


def is_held(error: Exception) -> bool:
    return any(words in str(error).casefold() for words in _HELD)
