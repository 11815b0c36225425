"""The store's file: made once, attached only for the moment something is read or written."""

import contextlib
import os
import secrets
import shutil
import time
from collections.abc import Callable, Iterator
from pathlib import Path

import duckdb

from midspread.engine.errors import StoreError, StoreTooNew, UsageError
from midspread.engine.publishing import publish
from midspread.engine.scratch import scratch_folder
from midspread.engine.store.layout import ALIAS, FORMAT, PROGRAM, STORAGE_VERSION, creating
from midspread.engine.store.locking import busy, lock_path, locked, not_writable, retry
from midspread.engine.store.quoting import literal, quoted
from midspread.engine.store.trouble import as_store_error, damaged, is_held, not_a_store
from midspread.engine.store.upgrading import copy_beside, upgrade

# Our own commands hold the store for moments; another program may hold it for hours.
WAIT_FOR_OURS_S = 60.0
WAIT_FOR_OTHERS_S = 3.0
_MAGIC = b"DUCK"
_CONFIG: dict[str, str | bool | int | float | list[str]] = {
    "threads": 1,
    "autoinstall_known_extensions": False,
    "autoload_known_extensions": False,
}

# Stores that this process has looked at, and in which state of the file: one command asks several
# times, and to attach a store with many grids takes a while.
_sound: dict[Path, tuple[int, ...]] = {}


class Store:
    """The local store.

    Make one with :meth:`open`. Threads may share it. It holds no file open between uses.

    Parameters
    ----------
    path : Path
        The database file.
    memory : str, optional
        Most memory that its engine takes; beyond, it writes to a scratch folder.

    Attributes
    ----------
    path : Path
        The database file, absolute, links resolved.
    """

    def __init__(self, path: Path, memory: str | None = None) -> None:
        self.path = Path(os.path.realpath(path))
        self._memory = memory
        self._remove_scratch: Callable[[], object] | None = None
        self._engine: duckdb.DuckDBPyConnection | None = None
        self._format = FORMAT

    @classmethod
    def open(cls, path: Path, *, create: bool = True, memory: str | None = None) -> "Store":
        """Open a store, making it when it is missing.

        Parameters
        ----------
        path : Path
            The database file.
        create : bool
            Whether to make it when it is missing.
        memory : str, optional
            Most memory that its engine takes.

        Returns
        -------
        Store

        Raises
        ------
        NotAStore
            The path holds something else; it is left as it is.
        StoreDamaged, StoreTooNew, StoreBusy
            It cannot be read now; it is left as it is.
        StoreNotWritable
            It is missing and cannot be made.
        StoreError
            It is missing and `create` is False, or the disk is full.
        """
        store = cls(path, memory)
        if not store.path.exists():
            if not create:
                raise StoreError(
                    f"There is no store at {store.path}; a query makes one, or name another with "
                    "--store."
                )
            store._create()
        found = _state_of(store.path)
        if found is not None and _sound.get(store.path) == found:
            return store
        had_lock = lock_path(store.path).exists()
        try:
            with store.reading():
                pass
            if store._format < FORMAT:
                store._upgrade()
            elif found is not None:
                _sound[store.path] = found
        except StoreError:
            if not had_lock:
                lock_path(store.path).unlink(missing_ok=True)
            raise
        return store

    @contextlib.contextmanager
    def reading(self, wait_s: float = WAIT_FOR_OURS_S) -> Iterator[duckdb.DuckDBPyConnection]:
        """Attach the store read-only for the length of a block.

        Parameters
        ----------
        wait_s : float
            How long to wait for other commands of ours, in seconds.

        Yields
        ------
        duckdb.DuckDBPyConnection
            The store is the database ``store`` there. Fetch results inside the block.
        """
        self._check_before_locking()
        with locked(self.path, shared=True, wait_s=wait_s), self._attached("READ_ONLY") as engine:
            yield engine

    @contextlib.contextmanager
    def writing(self, wait_s: float = WAIT_FOR_OURS_S) -> Iterator[duckdb.DuckDBPyConnection]:
        """Attach the store for the length of a block, which is one transaction.

        It is committed when the block ends and rolled back when it raises.

        Parameters
        ----------
        wait_s : float
            How long to wait for other commands of ours, in seconds.

        Yields
        ------
        duckdb.DuckDBPyConnection
            The store is the database ``store`` there.
        """
        self._check_before_locking()
        with locked(self.path, shared=False, wait_s=wait_s), self._attached("READ_WRITE") as engine:
            engine.execute("BEGIN")
            try:
                yield engine
                engine.execute("COMMIT")
            except BaseException:
                with contextlib.suppress(duckdb.Error):
                    engine.execute("ROLLBACK")
                raise

    def close(self) -> None:
        """Give the engine's memory back; the store may be used again."""
        if self._engine is not None:
            self._engine.close()
            self._engine = None
        if self._remove_scratch is not None:
            self._remove_scratch()
            self._remove_scratch = None

    @contextlib.contextmanager
    def exclusively(self, wait_s: float = WAIT_FOR_OURS_S) -> Iterator[duckdb.DuckDBPyConnection]:
        """Keep everybody of ours out for the length of a block; nothing is attached.

        Parameters
        ----------
        wait_s : float
            How long to wait for other commands of ours, in seconds.

        Yields
        ------
        duckdb.DuckDBPyConnection
            An engine to attach files to.
        """
        self._check_before_locking()
        with locked(self.path, shared=False, wait_s=wait_s):
            try:
                yield self._private_engine()
            finally:
                self.close()

    @contextlib.contextmanager
    def sharing(self, wait_s: float = WAIT_FOR_OURS_S) -> Iterator[None]:
        """Keep writers of ours out for the length of a block; nothing is attached.

        Parameters
        ----------
        wait_s : float
            How long to wait for other commands of ours, in seconds.
        """
        self._check_before_locking()
        with locked(self.path, shared=True, wait_s=wait_s):
            yield

    def _private_engine(self) -> duckdb.DuckDBPyConnection:
        if self._engine is None:
            scratch, self._remove_scratch = scratch_folder(self)
            config = {**_CONFIG, "temp_directory": str(scratch)}
            if self._memory is not None:
                config["memory_limit"] = self._memory
            try:
                self._engine = duckdb.connect(config=config)
            except duckdb.Error:
                if self._memory is None:
                    raise
                raise UsageError(
                    f"--memory must be an amount of memory, got {self._memory}; write for example "
                    "4GB."
                ) from None
        return self._engine

    @contextlib.contextmanager
    def _attached(self, mode: str) -> Iterator[duckdb.DuckDBPyConnection]:
        engine = self._private_engine()
        clean = False
        try:
            self._attach(engine, mode)
            self._check_format(engine)
            yield engine
            clean = _detach(engine)
        except duckdb.Error as error:
            raise self.error_of(error) from error
        finally:
            if not clean:
                # After a failed commit or checkpoint an engine may refuse all else: drop it.
                self.close()

    def _attach(self, engine: duckdb.DuckDBPyConnection, mode: str) -> None:
        sql = f"ATTACH {literal(str(self.path))} AS {quoted(ALIAS)} (TYPE duckdb, {mode})"

        def attempt() -> bool:
            self._check_beginning()
            try:
                engine.execute(sql)
            except duckdb.Error as error:
                if is_held(error):
                    return False
                raise
            return True

        if not retry(attempt, time.monotonic() + WAIT_FOR_OTHERS_S):
            raise busy(self.path)

    def _check_before_locking(self) -> None:
        """Make no lock beside something that is no store.

        Where there is a lock there was a store. Closing a file drops the engine's lock on it when
        another thread has it attached, so it is not opened here for nothing.
        """
        if not lock_path(self.path).exists():
            self._check_beginning()

    def _check_beginning(self) -> None:
        """Refuse what is no database at all, before the engine touches it."""
        try:
            with self.path.open("rb") as file:
                beginning = file.read(12)
        except FileNotFoundError:
            raise StoreError(
                f"The store {self.path} is gone; ask again and a new one is made, or name another "
                "with --store."
            ) from None
        except IsADirectoryError:
            raise not_a_store(self.path, "is a folder") from None
        except OSError as error:
            if self.path.is_dir():
                raise not_a_store(self.path, "is a folder") from None
            raise StoreError(
                f"The store {self.path} cannot be read ({error.strerror}); allow reading it, or "
                "name another store with --store."
            ) from error
        if beginning[8:12] != _MAGIC:
            raise not_a_store(self.path, "is some other file")

    def _check_format(self, engine: duckdb.DuckDBPyConnection) -> None:
        try:
            about = dict(
                engine.execute(f"SELECT name, value FROM {quoted(ALIAS)}.ledger.about").fetchall()
            )
        except (duckdb.CatalogException, duckdb.BinderException):
            about = {}
        if about.get("program") != PROGRAM:
            raise not_a_store(self.path, "is a database of another program")
        found = about.get("format") or ""
        if not found.isdigit():
            raise damaged(self.path, "it does not say its format")
        if int(found) > FORMAT:
            raise StoreTooNew(
                f"The store {self.path} was written by a newer Midspread (format {found}, this one "
                f"reads up to {FORMAT}); update Midspread, or name another store with --store."
            )
        self._format = int(found)

    def _upgrade(self) -> None:
        """Bring a store of an older format up to date; a copy of it is kept beside it."""
        with self.exclusively():
            with self._attached("READ_WRITE") as engine:  # folds in the log beside the file
                engine.execute(f"CHECKPOINT {quoted(ALIAS)}")
            if self._format < FORMAT:  # nobody was faster
                try:
                    copy = copy_beside(self.path, self._format)
                    shutil.copy2(self.path, copy.with_name(copy.name + ".new"))
                    publish(copy.with_name(copy.name + ".new"), copy)
                except OSError as error:
                    raise self.error_of(error) from error
                with self._attached("READ_WRITE") as engine:
                    upgrade(engine, self._format)

    def _create(self) -> None:
        if not self.path.parent.is_dir():
            raise not_writable(self.path)
        had_lock = lock_path(self.path).exists()
        fresh = self.path.with_name(f".{self.path.name}.{secrets.token_hex(6)}.new")
        with locked(self.path, shared=False, wait_s=WAIT_FOR_OURS_S):
            if self.path.exists():  # another command was faster
                return
            try:
                self._write_empty(fresh)
                self._set_log_aside()
                publish(fresh, self.path)
            except (duckdb.Error, OSError) as error:
                if not had_lock:
                    lock_path(self.path).unlink(missing_ok=True)
                raise self.error_of(error) from error
            finally:
                self.close()
                remove_database(fresh)

    def _set_log_aside(self) -> None:
        """Rename the log of a store that is gone: the engine would apply it to the new one.

        It is left when a store is removed or moved without the log beside it, and kept under
        another name because it may belong to the one that was moved.
        """
        log = self.path.with_name(f"{self.path.name}.wal")
        if log.exists():
            log.rename(log.with_name(f"{log.name}.{secrets.token_hex(6)}.left"))

    def _write_empty(self, path: Path) -> None:
        engine = self._private_engine()
        engine.execute(
            f"ATTACH {literal(str(path))} AS fresh"
            f" (TYPE duckdb, STORAGE_VERSION {literal(STORAGE_VERSION)})"
        )
        engine.execute("BEGIN")
        for statement in creating("fresh"):
            engine.execute(statement)
        engine.execute("COMMIT")
        engine.execute("DETACH fresh")

    def error_of(self, error: Exception) -> StoreError:
        """Turn an error of the engine or the system about this store into ours."""
        return as_store_error(self.path, error)


@contextlib.contextmanager
def reading(path: Path, memory: str | None = None) -> Iterator[duckdb.DuckDBPyConnection]:
    """Read the store of a path for the length of a block; as `Store.open` and `Store.reading`."""
    opened = contextlib.closing(Store.open(path, create=False, memory=memory))
    with opened as store, store.reading() as engine:
        yield engine


@contextlib.contextmanager
def writing(path: Path, memory: str | None = None) -> Iterator[duckdb.DuckDBPyConnection]:
    """Write to the store of a path, in one transaction; as `Store.open` and `Store.writing`."""
    opened = contextlib.closing(Store.open(path, create=False, memory=memory))
    with opened as store, store.writing() as engine:
        yield engine


def remove_database(path: Path) -> None:
    """Remove a database of ours with what may stand beside it."""
    for name in (path.name, path.name + ".wal"):
        path.with_name(name).unlink(missing_ok=True)


def _state_of(path: Path) -> tuple[int, ...] | None:
    """What changes whenever a file does; None where it cannot be looked at."""
    try:
        state = path.stat()
    except OSError:
        return None
    return state.st_dev, state.st_ino, state.st_size, state.st_mtime_ns, state.st_ctime_ns


def _detach(engine: duckdb.DuckDBPyConnection) -> bool:
    """Let the store go; False when the engine is of no further use.

    What is committed stands in the log beside the file, so a full disk at the moment the log is
    folded in does no harm: the next command does it.
    """
    try:
        engine.execute(f"DETACH {quoted(ALIAS)}")
    except duckdb.Error as error:
        if "checkpoint during detach" in str(error).casefold():
            return False
        raise
    return True
