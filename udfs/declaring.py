"""How a function is declared: once, next to its kernel.

The DuckDB registration, the range checks, the reference (`midspread functions`) and the list
the tests walk are all derived from these declarations.
"""

import inspect
import struct
from collections.abc import Callable, Mapping
from typing import Any, Final, TypeVar

import numpy as np
import numpy.typing as npt

from midspread.udfs.function import Family, Function, Helper
from midspread.udfs.parameters import Parameter, ParameterError

__all__ = [
    "NO_RECORD",
    "NULL",
    "Family",
    "Function",
    "Helper",
    "Parameter",
    "ParameterError",
    "Values",
    "aggregate",
    "batch_aggregate",
    "compiled",
    "declared",
    "helper",
    "helpers",
    "is_compiled",
    "null_mask",
    "row_function",
    "table_function",
]

Values = npt.NDArray[np.float64]
"""Sorted values of one group: float64, ascending, neither NULL nor NaN."""

_NULL_BITS: Final = 0x7FF8_0000_4E55_4C4C
NULL: Final[float] = struct.unpack("<d", struct.pack("<Q", _NULL_BITS))[0]
"""What a kernel returns for NULL: a NaN whose payload no arithmetic produces."""

NO_RECORD: Final = "no record"
"""What a batch aggregate may return besides its fields: which groups are NULL as a whole."""

Anything = TypeVar("Anything", bound=Callable[..., Any])

_COMPILED_MARK: Final = "__midspread_compiled__"
_AGGREGATES: dict[str, Function] = {}
_ROW_FUNCTIONS: dict[str, Function] = {}
_TABLES: dict[str, Function] = {}
_HELPERS: dict[str, Helper] = {}


def compiled(function: Anything) -> Anything:
    """Mark a helper that kernels call; it stays a plain function and is compiled on first use."""
    setattr(function, _COMPILED_MARK, True)
    return function


def is_compiled(value: object) -> bool:
    """Whether a value is a function that `compiled` or `aggregate` marked."""
    return inspect.isfunction(value) and hasattr(value, _COMPILED_MARK)


def aggregate(
    *,
    family: Family,
    formula: str,
    source: str,
    breakdown: str,
    cost: str,
    smallest_n: int,
    example: str,
    parameters: tuple[Parameter, ...] = (),
    columns: tuple[str, ...] = ("x",),
    fields: tuple[str, ...] = (),
    rows: Callable[[int], int] | None = None,
    labels: Mapping[str, tuple[str, ...]] | None = None,
    linear: bool = True,
    watches: bool = False,
    version: int = 1,
) -> Callable[[Anything], Anything]:
    """Declare an aggregate function; the decorated function is its kernel.

    Parameters
    ----------
    family, formula, source, breakdown, cost, example : str
        What `midspread functions` shows.
    smallest_n : int
        Groups with fewer values give NULL; the kernel never sees them.
    parameters : tuple of Parameter
        In the order the kernel takes them after its columns.
    columns : tuple of str
        ``("x",)``; or two, such as ``("x", "w")``: pairs sorted by the first, then the second. Only
        a column w holds weights, which may not be negative.
    fields : tuple of str
        Empty for a single number; else the kernel writes one number a field into ``out``.
    rows : callable, optional
        For a list of records: how many records a group of n values gives.
    labels : mapping, optional
        Fields that hold an index into these texts.
    linear : bool
        O(n) once the values are sorted, so that several functions may share one sort.
    watches : bool
        The kernel takes the cells of the control last and heeds a request to stop by itself: for
        what takes seconds on one large group.
    version : int
        Raised whenever the results change, so that kept answers are computed again.

    Returns
    -------
    callable
        The function unchanged, marked for compilation and entered in the catalogue.
    """

    def declare(kernel: Anything) -> Anything:
        name = kernel.__name__
        _AGGREGATES[name] = Function(
            name=name,
            family=family,
            kind="aggregate",
            columns=columns,
            parameters=parameters,
            fields=fields,
            formula=formula,
            source=source,
            breakdown=breakdown,
            cost=cost,
            smallest_n=smallest_n,
            example=example,
            description=inspect.cleandoc(kernel.__doc__ or ""),
            version=version,
            watches=watches,
            shares_sort=linear and not fields and columns == ("x",),
            kernel=kernel,
            rows=rows,
            labels=dict(labels or {}),
        )
        return compiled(kernel)

    return declare


def batch_aggregate(
    *,
    family: Family,
    formula: str,
    source: str,
    breakdown: str,
    cost: str,
    smallest_n: int,
    example: str,
    columns: tuple[str, ...],
    fields: tuple[str, ...],
    keys: tuple[str, ...] = (),
    parameters: tuple[Parameter, ...] = (),
    field_types: Mapping[str, str] | None = None,
    version: int = 1,
) -> Callable[[Anything], Anything]:
    """Declare an aggregate that works on a batch of groups at once, in Python.

    For what is more than a loop over sorted values: several columns, keys of any type, text
    parameters. The decorated function takes a `Batch` and returns one array a field.

    Parameters
    ----------
    columns : tuple of str
        A row is skipped where any of them is NULL.
    keys : tuple of str
        Those of the columns that may have any simple type and arrive as ranks of their values.
    fields : tuple of str
        The record's fields, in order.
    field_types : mapping, optional
        The SQL types of fields that are not DOUBLE.
    family, formula, source, breakdown, cost, smallest_n, example, parameters, version
        As for `aggregate`; parameters may be of any kind.

    Returns
    -------
    callable
        The function unchanged and entered in the catalogue.
    """

    def declare(compute: Anything) -> Anything:
        name = compute.__name__
        _AGGREGATES[name] = Function(
            name=name,
            family=family,
            kind="batch",
            columns=columns,
            keys=keys,
            parameters=parameters,
            fields=fields,
            field_types=dict(field_types or {}),
            formula=formula,
            source=source,
            breakdown=breakdown,
            cost=cost,
            smallest_n=smallest_n,
            example=example,
            description=inspect.cleandoc(compute.__doc__ or ""),
            version=version,
            kernel=compute,
        )
        return compute

    return declare


def row_function(
    *,
    family: Family,
    formula: str,
    source: str,
    example: str,
    columns: tuple[str, ...],
    body: str = "",
    keys: tuple[str, ...] = (),
    parameters: tuple[Parameter, ...] = (),
    field_types: Mapping[str, str] | None = None,
    version: int = 1,
) -> Callable[[Anything], Anything]:
    """Declare a function of one row's values.

    Parameters
    ----------
    columns : tuple of str
        Numbers, but for those listed under keys.
    body : str
        SQL over the names of columns and parameters. When empty, the decorated function computes:
        it takes one array of float64 for each column and parameter, NaN where NULL, and returns
        the results, `NULL` where there is none.
    keys : tuple of str
        Columns that may have any type; they need a body.
    field_types : mapping, optional
        Under ``""`` the SQL type of the result when it is not DOUBLE.
    family, formula, source, example, parameters, version
        As for `aggregate`.

    Returns
    -------
    callable
        The function unchanged and entered in the catalogue.
    """

    def declare(compute: Anything) -> Anything:
        name = compute.__name__
        _ROW_FUNCTIONS[name] = Function(
            name=name,
            family=family,
            kind="row",
            columns=columns,
            keys=keys,
            parameters=parameters,
            fields=(),
            field_types=dict(field_types or {}),
            formula=formula,
            source=source,
            breakdown="each row by itself",
            cost="O(1) a row",
            smallest_n=1,
            example=example,
            description=inspect.cleandoc(compute.__doc__ or ""),
            version=version,
            kernel=compute,
            body=body,
        )
        return compute

    return declare


def helper(name: str, result: str) -> Callable[[Anything], Anything]:
    """Declare an Arrow function ``name`` of any arguments for macros and table functions.

    The decorated function takes a `Work` (threads, progress, request to stop) and one Arrow array
    for each argument of the call; it returns an Arrow array of the SQL type ``result``.
    """

    def declare(compute: Anything) -> Anything:
        _HELPERS[name] = Helper(name, result, compute)
        return compute

    return declare


def helpers() -> tuple[Helper, ...]:
    """Every helper declared by the modules imported so far."""
    return tuple(_HELPERS.values())


def table_function(
    *,
    columns: tuple[str, ...],
    parameters: tuple[Parameter, ...],
    fields: tuple[str, ...],
    formula: str,
    source: str,
    breakdown: str,
    cost: str,
    example: str,
    smallest_n: int = 0,
    version: int = 1,
) -> Callable[[Anything], Anything]:
    """Declare a table function; the decorated function writes the query it stands for.

    Parameters
    ----------
    columns : tuple of str
        Required arguments: the table and the columns it works on.
    parameters : tuple of Parameter
        Optional arguments; a default that is text is an SQL literal.
    fields : tuple of str
        The result's columns, after the keys.
    formula, source, breakdown, cost, example, smallest_n, version
        As for `aggregate`.

    Returns
    -------
    callable
        The function unchanged. It takes all arguments as Python values, by name, and returns
        SQL text; it raises ParameterError for what is not allowed.
    """

    def declare(writer: Anything) -> Anything:
        name = writer.__name__
        _TABLES[name] = Function(
            name=name,
            family="tables",
            kind="table",
            columns=columns,
            parameters=parameters,
            fields=fields,
            formula=formula,
            source=source,
            breakdown=breakdown,
            cost=cost,
            smallest_n=smallest_n,
            example=example,
            description=inspect.cleandoc(writer.__doc__ or ""),
            version=version,
            kernel=writer,
        )
        return writer

    return declare


def declared() -> dict[str, Function]:
    """Every function declared by the modules imported so far, by name."""
    return {**_AGGREGATES, **_ROW_FUNCTIONS, **_TABLES}


def null_mask(numbers: Values) -> npt.NDArray[np.bool_]:
    """Where kernels answered NULL."""
    return np.ascontiguousarray(numbers).view(np.uint64) == np.uint64(_NULL_BITS)
