"""The loops over groups that kernels are compiled into.

Each template calls the global names ``adapter`` and, through it, ``kernel``; `driver` replaces
them. All of them share one signature, given beside them.
"""

import functools
import math
from collections.abc import Callable
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from midspread.udfs.compiling import compile_driver
from midspread.udfs.declaring import Function, Values, compiled

Indices = npt.NDArray[np.int64]

STOP: Final = 0
"""Cell of the control array that asks the loops to stop."""
DONE: Final = 1
"""Cell of the control array that counts the values the loops have finished."""

_SIGNATURE = (
    "void(float64[::1], float64[::1], int64[::1], int64[::1], int64[::1], "
    "float64[:, ::1], int64, float64[:, ::1], int64[::1], int64, int64[::1])"
)


def _over_groups(
    values: Values,
    weights: Values,
    starts: Indices,
    lengths: Indices,
    groups: Indices,
    parameters: Values,
    smallest: int,
    out: Values,
    rows: Indices,
    column: int,
    control: Indices,
) -> None:
    """Run the kernel on each group's sorted values.

    Group r of this batch holds ``values[starts[r] : starts[r] + lengths[r]]`` and answers in
    ``out[rows[groups[r]], column:]``, prefilled with NULL.
    """
    for r in range(groups.size):
        if control[STOP] != 0:
            return
        n = lengths[r]
        group = groups[r]
        if n >= smallest and n > 0:
            x = values[starts[r] : starts[r] + n]
            w = weights[starts[r] : starts[r] + n] if weights.size > 0 else weights
            adapter(x, w, parameters, group, out, rows, column)
        control[DONE] += n


def _over_watching_groups(
    values: Values,
    weights: Values,
    starts: Indices,
    lengths: Indices,
    groups: Indices,
    parameters: Values,
    smallest: int,
    out: Values,
    rows: Indices,
    column: int,
    control: Indices,
) -> None:
    """Do what `_over_groups` does with a kernel that itself watches for a request to stop."""
    for r in range(groups.size):
        if control[STOP] != 0:
            return
        n = lengths[r]
        group = groups[r]
        if n >= smallest and n > 0:
            x = values[starts[r] : starts[r] + n]
            w = weights[starts[r] : starts[r] + n] if weights.size > 0 else weights
            watching_adapter(x, w, parameters, group, out, rows, column, control)
        control[DONE] += n


@compiled
def _not_a_number(x: Values, w: Values) -> bool:
    """Whether a group holds a NaN; sorting puts them last."""
    if math.isnan(x[x.size - 1]):
        return True
    for i in range(w.size):  # noqa: SIM110 - numba has no any() over a generator
        if math.isnan(w[i]):
            return True
    return False


def adapter(
    x: Values, w: Values, parameters: Values, g: int, out: Values, rows: Indices, column: int
) -> None:
    """Stands for one of the adapters below."""
    raise TypeError("replaced when a driver is compiled")


def watching_adapter(
    x: Values,
    w: Values,
    parameters: Values,
    g: int,
    out: Values,
    rows: Indices,
    column: int,
    control: Indices,
) -> None:
    """Stands for one of the adapters below that hand on the control."""
    raise TypeError("replaced when a driver is compiled")


def kernel(*arguments: Any) -> Any:
    """Stands for the kernel of a function."""
    raise TypeError("replaced when a driver is compiled")


@compiled
def _number_x0(x: Values, w: Values, p: Values, g: int, out: Values, rows: Indices, c: int) -> None:
    out[rows[g], c] = math.nan if _not_a_number(x, w) else kernel(x)


@compiled
def _number_x1(x: Values, w: Values, p: Values, g: int, out: Values, rows: Indices, c: int) -> None:
    out[rows[g], c] = math.nan if _not_a_number(x, w) else kernel(x, p[0, g])


@compiled
def _number_x2(x: Values, w: Values, p: Values, g: int, out: Values, rows: Indices, c: int) -> None:
    out[rows[g], c] = math.nan if _not_a_number(x, w) else kernel(x, p[0, g], p[1, g])


@compiled
def _number_xw0(
    x: Values, w: Values, p: Values, g: int, out: Values, rows: Indices, c: int
) -> None:
    out[rows[g], c] = math.nan if _not_a_number(x, w) else kernel(x, w)


@compiled
def _number_xw1(
    x: Values, w: Values, p: Values, g: int, out: Values, rows: Indices, c: int
) -> None:
    out[rows[g], c] = math.nan if _not_a_number(x, w) else kernel(x, w, p[0, g])


@compiled
def _record_xw0(
    x: Values, w: Values, p: Values, g: int, out: Values, rows: Indices, c: int
) -> None:
    if _not_a_number(x, w):
        out[rows[g], c:] = math.nan
    else:
        kernel(x, w, out[rows[g], c:])


@compiled
def _record_xw1(
    x: Values, w: Values, p: Values, g: int, out: Values, rows: Indices, c: int
) -> None:
    if _not_a_number(x, w):
        out[rows[g], c:] = math.nan
    else:
        kernel(x, w, p[0, g], out[rows[g], c:])


@compiled
def _watching_record_x0(
    x: Values, w: Values, p: Values, g: int, out: Values, rows: Indices, c: int, control: Indices
) -> None:
    if _not_a_number(x, w):
        out[rows[g], c:] = math.nan
    else:
        kernel(x, out[rows[g], c:], control)


@compiled
def _watching_record_xw0(
    x: Values, w: Values, p: Values, g: int, out: Values, rows: Indices, c: int, control: Indices
) -> None:
    if _not_a_number(x, w):
        out[rows[g], c:] = math.nan
    else:
        kernel(x, w, out[rows[g], c:], control)


@compiled
def _watching_record_xw1(
    x: Values, w: Values, p: Values, g: int, out: Values, rows: Indices, c: int, control: Indices
) -> None:
    if _not_a_number(x, w):
        out[rows[g], c:] = math.nan
    else:
        kernel(x, w, p[0, g], out[rows[g], c:], control)


@compiled
def _record_x0(x: Values, w: Values, p: Values, g: int, out: Values, rows: Indices, c: int) -> None:
    if _not_a_number(x, w):
        out[rows[g], c:] = math.nan
    else:
        kernel(x, out[rows[g], c:])


@compiled
def _record_x1(x: Values, w: Values, p: Values, g: int, out: Values, rows: Indices, c: int) -> None:
    if _not_a_number(x, w):
        out[rows[g], c:] = math.nan
    else:
        kernel(x, p[0, g], out[rows[g], c:])


@compiled
def _whole_record_x0(
    x: Values, w: Values, p: Values, g: int, out: Values, rows: Indices, c: int
) -> None:
    """For kernels that deal with NaN themselves: summaries count it."""
    kernel(x, out[rows[g], c:])


@compiled
def _ranked_record(
    x: Values, w: Values, p: Values, g: int, out: Values, rows: Indices, c: int
) -> None:
    """For a kernel whose values may be ranks: the parameters hold the number behind each rank."""
    kernel(x, p[0], out[rows[g], c:])


@compiled
def _watching_ranked_record(
    x: Values, w: Values, p: Values, g: int, out: Values, rows: Indices, c: int, control: Indices
) -> None:
    """For a kernel that deals with NaN itself; all groups share one list of numbers."""
    kernel(x, p[0], out[rows[g], c:], control)


@compiled
def _watching_ranked_pairs(
    x: Values, w: Values, p: Values, g: int, out: Values, rows: Indices, c: int, control: Indices
) -> None:
    """The same for a kernel of pairs."""
    kernel(x, w, p[0], out[rows[g], c:], control)


@compiled
def _list_x0(x: Values, w: Values, p: Values, g: int, out: Values, rows: Indices, c: int) -> None:
    answer = out[rows[g] : rows[g + 1], :]
    if _not_a_number(x, w):
        answer[:, :] = math.nan
    else:
        kernel(x, answer)


_ADAPTERS: Final[dict[tuple[str, int, int], Callable[..., None]]] = {
    ("number", 1, 0): _number_x0,
    ("number", 1, 1): _number_x1,
    ("number", 1, 2): _number_x2,
    ("number", 2, 0): _number_xw0,
    ("number", 2, 1): _number_xw1,
    ("record", 1, 0): _record_x0,
    ("record", 1, 1): _record_x1,
    ("record", 2, 0): _record_xw0,
    ("record", 2, 1): _record_xw1,
    ("list", 1, 0): _list_x0,
}
_WATCHING_ADAPTERS: Final[dict[tuple[str, int, int], Callable[..., None]]] = {
    ("record", 1, 0): _watching_record_x0,
    ("record", 2, 0): _watching_record_xw0,
    ("record", 2, 1): _watching_record_xw1,
}


def driver(function: Function) -> Callable[..., None]:
    """The compiled loop of an aggregate; compiled or loaded from disk on the first call."""
    assert function.kernel is not None
    shape = "list" if function.rows else "record" if function.fields else "number"
    form = shape, len(function.columns), len(function.parameters)
    if function.watches:
        return _watching_loop(function.name, function.kernel, _WATCHING_ADAPTERS[form])
    return _compiled_loop(function.name, function.kernel, _ADAPTERS[form])


def summary_driver(name: str, function: Callable[..., None]) -> Callable[..., None]:
    """The compiled loop of a kernel ``(x, out)`` that handles NaN by itself."""
    return _compiled_loop(name, function, _whole_record_x0)


def ranked_driver(name: str, function: Callable[..., None]) -> Callable[..., None]:
    """The compiled loop of a kernel ``(x, points, out)`` that handles NaN by itself."""
    return _compiled_loop(name, function, _ranked_record)


def watching_ranked_driver(name: str, function: Callable[..., None]) -> Callable[..., None]:
    """The same for a kernel ``(x, numbers, out, control)`` that heeds a request to stop."""
    return _watching_loop(name, function, _watching_ranked_record)


def watching_pairs_driver(name: str, function: Callable[..., None]) -> Callable[..., None]:
    """The same for a kernel of pairs ``(y, x, numbers, out, control)``."""
    return _watching_loop(name, function, _watching_ranked_pairs)


@functools.cache
def _compiled_loop(
    name: str, kernel_function: Callable[..., Any], chosen: Callable[..., None]
) -> Callable[..., None]:
    return compile_driver(
        _over_groups, {"adapter": chosen, "kernel": kernel_function}, name, _SIGNATURE
    )


@functools.cache
def _watching_loop(
    name: str, kernel_function: Callable[..., Any], chosen: Callable[..., None]
) -> Callable[..., None]:
    replacements = {"watching_adapter": chosen, "kernel": kernel_function}
    return compile_driver(_over_watching_groups, replacements, name, _SIGNATURE)
