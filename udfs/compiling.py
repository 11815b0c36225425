"""Kernels are compiled by numba on first use and kept on disk for the next process."""

import contextlib
import functools
import hashlib
import inspect
import os
import sys
import tempfile
import threading
import types
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any, Final

from midspread.udfs.declaring import is_compiled
from midspread.udfs.emitting import machine_code_only_for

_OPTIONS: Final[Any] = {"nogil": True, "error_model": "numpy"}
_CALLEE_OPTIONS: Final[Any] = {**_OPTIONS, "no_cpython_wrapper": True, "no_cfunc_wrapper": True}
_compiling = threading.RLock()
_activity: list[str] = []


def activity() -> str | None:
    """What is being compiled at this moment, for a progress display; None when nothing is."""
    return _activity[-1] if _activity else None


@functools.cache
def dispatcher(function: Callable[..., Any]) -> Any:
    """The numba dispatcher of a marked function, with its marked callees compiled as well."""
    import numba

    return numba.njit(**_OPTIONS)(_with_compiled_callees(function, {}))


def compile_driver(
    template: Callable[..., Any],
    replacements: dict[str, Callable[..., Any]],
    name: str,
    signature: str,
) -> Callable[..., None]:
    """Compile a loop over groups around one kernel.

    Parameters
    ----------
    template : callable
        The loop, which calls global names such as ``kernel``.
    replacements : dict
        The functions these global names stand for.
    name : str
        Name of the result on disk; one name always has one signature, so that processes that
        fill the cache at once write the same content.
    signature : str
        numba's signature of the loop.

    Returns
    -------
    callable
        The compiled loop; it releases the GIL.
    """
    import numba

    with _compiling:
        _activity.append(name)
        try:
            function = _with_compiled_callees(template, replacements)
            function.__name__ = function.__qualname__ = name
            compiled = numba.njit(**_OPTIONS)(function)
            folder = _cache_folder()
            with machine_code_only_for(name):
                if folder is None:
                    compiled.compile(signature)
                else:
                    compiled._cache = _driver_cache(function, folder)
                    with _only_one_process(folder, name):
                        compiled.compile(signature)
            return compiled
        finally:
            _activity.pop()


def _with_compiled_callees(
    function: Callable[..., Any], replacements: dict[str, Callable[..., Any]]
) -> types.FunctionType:
    """A copy of a function whose globals hold dispatchers in place of marked functions."""
    assert isinstance(function, types.FunctionType)
    names = {**function.__globals__, **replacements}
    for name in function.__code__.co_names:
        value = names.get(name)
        if is_compiled(value) and value is not function:
            names[name] = _bound_dispatcher(value, replacements)
    copy = types.FunctionType(
        function.__code__, names, function.__name__, function.__defaults__, function.__closure__
    )
    copy.__module__ = function.__module__
    return copy


def _bound_dispatcher(function: Any, replacements: dict[str, Callable[..., Any]]) -> Any:
    """A callee; one that itself calls a replaced name (an adapter) is made for this loop alone."""
    replaced = [name for name in function.__code__.co_names if name in replacements]
    if not replaced:
        return _callee(function)
    import numba

    copy = _with_compiled_callees(function, replacements)
    # Loops compiled by different processes are linked by name: one name, one content. numba's own
    # numbering starts again in each process and cannot tell the copies of one adapter apart.
    stands_for = "_".join(replacements[name].__name__ for name in replaced)
    copy.__name__ = copy.__qualname__ = f"{function.__name__}_of_{stands_for}"
    # Written into its caller: one layer less to optimise, half a second less to wait.
    return numba.njit(**_CALLEE_OPTIONS, inline="always")(copy)


@functools.cache
def _callee(function: Callable[..., Any]) -> Any:
    """A dispatcher for compiled code alone: no way in from Python, so a fifth less to compile."""
    import numba

    made = numba.njit(**_CALLEE_OPTIONS)(_with_compiled_callees(function, {}))
    if "kind" not in inspect.signature(function).parameters:
        # numba compiles once more for each constant in a call; only a kind is worth that.
        find = made.get_call_template
        unliteral: Any = numba.types.unliteral
        made.get_call_template = lambda given, named: find(
            tuple(unliteral(one) for one in given),
            {name: unliteral(one) for name, one in named.items()},
        )
    return made


@functools.cache
def _source_stamp() -> str:
    """A digest of every source file of this package: kernels call helpers of other files."""
    digest = hashlib.sha256()
    root = Path(__file__).parent
    for path in sorted(root.rglob("*.py")):
        digest.update(str(path.relative_to(root)).encode())
        digest.update(path.read_bytes())
    return digest.hexdigest()[:16]


@functools.cache
def _cache_folder() -> Path | None:
    """A folder for compiled kernels that this user can write, or None."""
    if sys.platform == "win32":
        base = Path(os.environ.get("LOCALAPPDATA", Path.home() / "AppData" / "Local"))
    else:
        base = Path(os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache")
    for candidate in (base, Path(tempfile.gettempdir()) / f"midspread-{os.getuid()}"):
        folder = candidate / "midspread" / f"kernels-{_source_stamp()}"
        with contextlib.suppress(OSError):
            folder.mkdir(parents=True, exist_ok=True, mode=0o700)
            # Compiled code is run as it stands: take it only from a folder of this user's own.
            if folder.stat().st_uid != os.getuid():
                continue
            tempfile.TemporaryFile(dir=folder).close()
            return folder
    return None


@contextlib.contextmanager
def _only_one_process(folder: Path, name: str) -> Iterator[None]:
    """Hold a loop's lock: numba's index of its compiled code is not made for two writers."""
    try:
        import fcntl
    except ImportError:  # no flock here: the worst case is compiling twice
        yield
        return
    with (folder / f"{name}.lock").open("w") as lock:
        fcntl.flock(lock, fcntl.LOCK_EX)
        yield


def _driver_cache(function: types.FunctionType, folder: Path) -> Any:
    """numba's disk cache, kept in our folder and keyed by all of our sources."""
    from numba.core import caching

    class Locator(caching._CacheLocator):
        def get_cache_path(self) -> str:
            return str(folder)

        def get_source_stamp(self) -> str:
            return _source_stamp()

        def get_disambiguator(self) -> str:
            return ""

        @classmethod
        def from_function(cls, _function: object, _file: object) -> "Locator":
            return cls()

    class Content(caching.CompileResultCacheImpl):
        _locator_classes: Any = [Locator]  # noqa: RUF012 - numba reads it from the class

        def get_filename_base(self, _fullname: str, abiflags: str) -> str:
            version = f"{sys.version_info.major}{sys.version_info.minor}"
            return f"{function.__name__}.py{version}{abiflags}"

    class DriverCache(caching.Cache):
        _impl_class: Any = Content

        def load_overload(self, sig: Any, target_context: Any) -> Any:
            untyped: Any = super()
            try:
                return untyped.load_overload(sig, target_context)
            except Exception:  # a file cut short, by a crash say: compile again and replace it
                with contextlib.suppress(OSError):
                    untyped.flush()
                return None

        def save_overload(self, sig: Any, data: Any) -> None:
            untyped: Any = super()
            with contextlib.suppress(OSError):  # a full disk costs time, not the answer
                untyped.save_overload(sig, data)

    make: Any = DriverCache
    return make(function)
