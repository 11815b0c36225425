"""One lock beside a file, for threads and processes alike.

The engine refuses a database that another process writes, at once and without waiting. Whoever
takes this lock first never meets that refusal from another Midspread. The lock is an empty hidden
file beside the database; it goes with the process that holds it, however that ends.
"""

import contextlib
import os
import random
import sys
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path

from midspread.engine.errors import StoreBusy, StoreNotWritable

if sys.platform == "win32":
    import msvcrt

    def _try_lock(descriptor: int, *, shared: bool) -> bool:  # noqa: ARG001 (none is shared here)
        os.lseek(descriptor, 0, os.SEEK_SET)
        try:
            msvcrt.locking(descriptor, msvcrt.LK_NBLCK, 1)
        except OSError:
            return False
        return True
else:
    try:
        import fcntl
    except ImportError:  # a platform without advisory locks: threads of this process only

        def _try_lock(descriptor: int, *, shared: bool) -> bool:  # noqa: ARG001
            return True
    else:

        def _try_lock(descriptor: int, *, shared: bool) -> bool:
            kind = fcntl.LOCK_SH if shared else fcntl.LOCK_EX
            try:
                fcntl.flock(descriptor, kind | fcntl.LOCK_NB)
            except BlockingIOError:
                return False
            except OSError:
                return True  # a file system that knows no locks: the engine's own must do
            return True


_SHORTEST_PAUSE_S = 0.002
_LONGEST_PAUSE_S = 0.05
_threads_guard = threading.Lock()
_threads: dict[str, threading.Lock] = {}


def lock_path(path: Path) -> Path:
    """Give the lock that goes with a file."""
    return path.with_name(f".{path.name}.lock")


@contextlib.contextmanager
def locked(path: Path, *, shared: bool, wait_s: float) -> Iterator[None]:
    """Hold the lock beside a file.

    Parameters
    ----------
    path : Path
        The file the lock protects.
    shared : bool
        True for readers, who go together; False for a writer, who goes alone. Threads of one
        process always go one by one, because the engine attaches a file once in a process.
    wait_s : float
        How long to wait for others, in seconds.

    Raises
    ------
    StoreBusy
        When the wait was in vain.
    StoreNotWritable
        When the lock cannot be made and `shared` is False. A reader goes without.
    """
    until = time.monotonic() + wait_s
    with _threads_guard:
        turn = _threads.setdefault(str(path), threading.Lock())
    if not turn.acquire(timeout=max(wait_s, 0)):
        raise busy(path)
    try:
        descriptor = _open_and_lock(path, shared=shared, until=until)
        try:
            yield
        finally:
            if descriptor is not None:
                os.close(descriptor)
    finally:
        turn.release()


def busy(path: Path) -> StoreBusy:
    """Say that others hold a store."""
    return StoreBusy(
        f"The store {path} is in use by another program; close it there and ask again, or name "
        "another store with --store."
    )


def retry(attempt: Callable[[], bool], until: float) -> bool:
    """Try until it succeeds or the time (of time.monotonic) is over; pauses grow."""
    pause = _SHORTEST_PAUSE_S
    while not attempt():
        if time.monotonic() >= until:
            return False
        time.sleep(pause * (0.5 + random.random()))
        pause = min(pause * 1.5, _LONGEST_PAUSE_S)
    return True


def _open_and_lock(path: Path, *, shared: bool, until: float) -> int | None:
    while True:
        descriptor = _open(lock_path(path), shared=shared)
        if descriptor is None:
            return None
        taken = False
        try:
            taken = retry(lambda fd=descriptor: _try_lock(fd, shared=shared), until)  # type: ignore[misc]
            if not taken:
                raise busy(path)
            if _is_still_there(descriptor, lock_path(path)):
                return descriptor
            taken = False
        finally:
            if not taken:
                os.close(descriptor)


def _open(path: Path, *, shared: bool) -> int | None:
    try:
        return os.open(path, os.O_RDWR | os.O_CREAT | getattr(os, "O_CLOEXEC", 0), 0o666)
    except OSError as error:
        with contextlib.suppress(OSError):
            return os.open(path, os.O_RDONLY | getattr(os, "O_CLOEXEC", 0))
        if shared:
            return None
        raise not_writable(path, error) from error


def not_writable(path: Path, error: OSError | None = None) -> StoreNotWritable:
    """Say that nothing can be made beside a path."""
    if not path.parent.is_dir():
        why = f"the folder {path.parent} does not exist"
    else:
        reason = f" ({error.strerror})" if error is not None and error.strerror else ""
        why = f"the folder {path.parent} cannot be written{reason}"
    return StoreNotWritable(
        f"No answer can be kept, because {why}; name a store in another folder with --store."
    )


def _is_still_there(descriptor: int, path: Path) -> bool:
    """Whether the locked file is the one others will find; somebody may have removed it."""
    try:
        return os.path.samestat(os.fstat(descriptor), path.stat())
    except OSError:
        return False
