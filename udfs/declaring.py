"""How a function is declared: once, next to its kernel.

The DuckDB registration, the range checks, the reference (`midspread functions`) and the list
the tests walk are all derived from these declarations.
"""

import inspect
import struct
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any, Final, Literal, TypeVar

import numpy as np
import numpy.typing as npt

Values = npt.NDArray[np.float64]
"""Sorted values of one group: float64, ascending, neither NULL nor NaN."""

_NULL_BITS: Final = 0x7FF8_0000_4E55_4C4C
NULL: Final[float] = struct.unpack("<d", struct.pack("<Q", _NULL_BITS))[0]
"""What a kernel returns for NULL: a NaN whose payload no arithmetic produces."""

Family = Literal["location", "weighted", "scale", "shape", "tables"]
Anything = TypeVar("Anything", bound=Callable[..., Any])

_COMPILED_MARK: Final = "__midspread_compiled__"
_AGGREGATES: dict[str, "Function"] = {}
_TABLES: dict[str, "Function"] = {}


class ParameterError(ValueError):
    """A parameter outside its range; the message is one sentence for the user."""


def shown(number: float) -> str:
    """A number as messages give it: all of its digits, so that 0.5000001 is not shown as 0.5."""
    return repr(float(number)).removesuffix(".0")


@dataclass(frozen=True)
class Parameter:
    """A parameter of a function and the range it must keep to.

    Attributes
    ----------
    name : str
        As written in SQL: ``share := 0.1``.
    meaning : str
        What it is, in a few words.
    default : float or str or bool or None
        A number, or for table functions an SQL literal given as text; None when required.
    low, high : float
        Smallest and largest value allowed.
    low_open, high_open : bool
        Whether the end itself is excluded.
    whole : bool
        Whether only whole numbers are allowed.
    """

    name: str
    meaning: str
    default: float | str | bool | None = None
    low: float = -np.inf
    high: float = np.inf
    low_open: bool = False
    high_open: bool = False
    whole: bool = False

    @property
    def allowed(self) -> str:
        """The range in words, as error messages and the reference give it."""
        kind = "a whole number" if self.whole else "a number"
        low, high = f"{self.low:g}", f"{self.high:g}"
        if np.isinf(self.low) and np.isinf(self.high):
            return kind
        if np.isinf(self.high):
            return f"{kind} {'above' if self.low_open else 'from'} {low}" + (
                "" if self.low_open else " up"
            )
        if self.low_open or self.high_open:
            return (
                f"{kind} {'above' if self.low_open else 'from'} {low} "
                f"{'and below' if self.high_open else 'up to'} {high}"
            )
        return f"{kind} from {low} to {high}"

    def check(self, function: str, values: Values, missing: npt.NDArray[np.bool_]) -> None:
        """Raise ParameterError, naming function and range, unless all values are allowed."""
        if missing.any():
            raise ParameterError(
                f"{function}: {self.name} must be {self.allowed}, got NULL; "
                f"give each group a value."
            )
        ok = (values > self.low) if self.low_open else (values >= self.low)
        ok &= (values < self.high) if self.high_open else (values <= self.high)
        ok &= np.isfinite(values)
        if self.whole:
            ok &= values == np.floor(values)
        if not ok.all():
            wrong = float(values[~ok][0])
            raise ParameterError(
                f"{function}: {self.name} must be {self.allowed}, got {shown(wrong)}; "
                f"write for example {self.name} := {self.example()}."
            )

    def example(self) -> str:
        """A value that may be given, as text."""
        if isinstance(self.default, (int, float)) and not isinstance(self.default, bool):
            return f"{self.default:g}"
        middle = (self.low + self.high) / 2
        return f"{middle:g}" if np.isfinite(middle) else "1"


@dataclass(frozen=True)
class Function:
    """One function of the catalogue; see `aggregate` and `table_function` for how it is made."""

    name: str
    family: Family
    kind: Literal["aggregate", "table"]
    columns: tuple[str, ...]
    parameters: tuple[Parameter, ...]
    fields: tuple[str, ...]
    formula: str
    source: str
    breakdown: str
    cost: str
    smallest_n: int
    example: str
    description: str
    version: int = 1
    shares_sort: bool = False
    kernel: Callable[..., Any] | None = None
    rows: Callable[[int], int] | None = None
    labels: Mapping[str, tuple[str, ...]] = field(default_factory=dict)

    @property
    def meaning(self) -> str:
        """The first sentence of the description."""
        return self.description.split("\n", 1)[0]

    @property
    def signature(self) -> str:
        """As written in SQL, with the defaults: ``trimmed_mean(x, share := 0.2)``."""
        shown = [*self.columns]
        for parameter in self.parameters:
            default = parameter.default
            if default is None:
                shown.append(parameter.name)
            elif isinstance(default, bool):
                shown.append(f"{parameter.name} := {str(default).lower()}")
            elif isinstance(default, str):
                shown.append(f"{parameter.name} := {default}")
            else:
                shown.append(f"{parameter.name} := {default:g}")
        return f"{self.name}({', '.join(shown)})"

    @property
    def place(self) -> str:
        """Where a call goes in a query."""
        return "in FROM, as a table" if self.kind == "table" else "in SELECT, as AVG is"


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
        ``("x",)``, or ``("x", "w")`` where w travels with the sorted x.
    fields : tuple of str
        Empty for a single number; else the kernel writes one number a field into ``out``.
    rows : callable, optional
        For a list of records: how many records a group of n values gives.
    labels : mapping, optional
        Fields that hold an index into these texts.
    linear : bool
        O(n) once the values are sorted, so that several functions may share one sort.
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
            shares_sort=linear and not fields and columns == ("x",),
            kernel=kernel,
            rows=rows,
            labels=dict(labels or {}),
        )
        return compiled(kernel)

    return declare


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
    return {**_AGGREGATES, **_TABLES}


def null_mask(numbers: Values) -> npt.NDArray[np.bool_]:
    """Where kernels answered NULL."""
    return np.ascontiguousarray(numbers).view(np.uint64) == np.uint64(_NULL_BITS)
