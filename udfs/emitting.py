"""Machine code for the finished loop alone, a third less to wait for.

numba optimises every function that a loop calls and turns it into machine code of its own, then
copies it into the loop and optimises it again there. The first of these is never run: callees are
called by compiled code only, which takes their intermediate code.
"""

import contextlib
import ctypes
from collections.abc import Iterator
from typing import Any


@contextlib.contextmanager
def machine_code_only_for(name: str) -> Iterator[None]:
    """While it is held, numba compiles functions of other names no further than needed for linking.

    Parameters
    ----------
    name : str
        The ``__qualname__`` of the function to make callable.
    """
    from numba.core import codegen, cpu
    from numba.core.compiler_lock import global_compiler_lock

    library, context = codegen.JITCodeLibrary, cpu.CPUContext
    methods = [
        (library, "_optimize_final_module", _nothing),
        (library, "_finalize_final_module", _without_machine_code),
        (context, "get_executable", _never_called),
    ]
    if not all(hasattr(owner, method) for owner, method, _ in methods):
        yield  # another numba than those known: slower, and as good
        return
    with global_compiler_lock:  # whatever else is compiled in this process waits
        kept = [(owner, method, getattr(owner, method)) for owner, method, _ in methods]
        for (owner, method, shorter), (_, _, full) in zip(methods, kept, strict=True):
            setattr(owner, method, _unless_named(name, full, shorter))
        try:
            yield
        finally:
            for owner, method, full in kept:
                setattr(owner, method, full)


def _unless_named(name: str, full: Any, shorter: Any) -> Any:
    def chosen(self: Any, *arguments: Any) -> Any:
        compiled = arguments[0] if arguments else self
        return (full if compiled.name == name else shorter)(self, *arguments)

    return chosen


def _nothing(_library: Any) -> None:
    pass


def _without_machine_code(library: Any) -> None:
    library._finalize_dynamic_globals()
    library._finalized = True


def _never_called(_context: Any, library: Any, fndesc: Any, env: Any) -> Any:
    """A stand-in for a callee's way in from Python; numba wants one, and each its own."""
    from numba import _dynfunc  # type: ignore[attr-defined]

    address = ctypes.cast(ctypes.pythonapi.Py_GetVersion, ctypes.c_void_p).value
    return _dynfunc.make_function(
        fndesc.lookup_module(), fndesc.qualname, "", address, env, (library,)
    )
