"""A statistic given as text: ``'trimmed_mean(0.1)'``, ``'median'``, ``'quantile_hf(x, 0.9)'``."""

import re
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from typing import Any, Final

import numpy as np

from midspread.udfs.compiling import compile_driver
from midspread.udfs.declaring import Function, Values, compiled, declared
from midspread.udfs.parameters import Parameter, ParameterError

STATISTIC: Final = Parameter(
    "statistic",
    "what to compute, as text: a one-column function with its parameters, or mean, median, sd",
    "'trimmed_mean(0.2)'",
    kind="text",
)

# What SQL already has a name for, in terms of ours.
_OTHER_NAMES: Final = {
    "mean": ("trimmed_mean", (0.0,)),
    "avg": ("trimmed_mean", (0.0,)),
    "median": ("trimmed_mean", (0.5,)),
    "sd": ("winsorized_sd", (0.0,)),
    "stddev": ("winsorized_sd", (0.0,)),
    "stddev_samp": ("winsorized_sd", (0.0,)),
}
_CALL: Final = re.compile(r"\s*([A-Za-z_]\w*)\s*(?:\(([^()]*)\))?\s*")
_ARGUMENT: Final = re.compile(r"\s*(?:([A-Za-z_]\w*)\s*(?::=|=>)\s*)?(\S.*?)\s*")
_NUMBER: Final = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?")


@dataclass(frozen=True)
class Statistic:
    """A function with its parameters.

    Attributes
    ----------
    function : Function
        An aggregate of numbers whose result is a single number.
    parameters : tuple of float
        In the order of the function's own.
    """

    function: Function
    parameters: tuple[float, ...] = ()

    @property
    def text(self) -> str:
        """As it would be written in SQL: ``trimmed_mean(0.1)``."""
        given = ", ".join(repr(value).removesuffix(".0") for value in self.parameters)
        return f"{self.function.name}({given})" if given else self.function.name


def read_statistic(caller: str, text: str, columns: tuple[str, ...] = ("x",)) -> Statistic:
    """The statistic that a text names.

    Parameters
    ----------
    caller : str
        The function it is given to, for messages.
    text : str
        A name, alone or with arguments in brackets; the columns' own names may be among them.
    columns : tuple of str
        The columns of the functions that fit.

    Raises
    ------
    ParameterError
        When it names none, with the list of those that fit.
    """
    fitting = statistics_of(columns)
    call = _CALL.fullmatch(text)
    name = call[1].lower() if call else ""
    given = _arguments(call[2] or "", columns) if call else None
    if name in _OTHER_NAMES and columns == ("x",) and given == []:
        function, parameters = _OTHER_NAMES[name]
        return Statistic(fitting[function], parameters)
    if given is None or name not in fitting:
        others = [word for word in ("mean", "median", "sd") if columns == ("x",)]
        listed = ", ".join([*others, *sorted(fitting)])
        raise ParameterError(
            f"{caller}: statistic must be one of {listed}, with numbers for parameters, got "
            f"'{text}'; write for example statistic := '{_example(columns)}'."
        )
    return Statistic(fitting[name], _parameters(caller, text, fitting[name], given))


def statistics_of(columns: tuple[str, ...] = ("x",)) -> dict[str, Function]:
    """The functions of these columns with a single number as result."""
    return {
        name: function
        for name, function in declared().items()
        if function.kind == "aggregate" and function.columns == columns and not function.fields
    }


def _example(columns: tuple[str, ...]) -> str:
    return "trimmed_mean(0.2)" if columns == ("x",) else "spearman"


def _arguments(text: str, columns: Iterable[str]) -> list[tuple[str, float]] | None:
    """Names ('' where none is written) and numbers; None when something else is written."""
    found: list[tuple[str, float]] = []
    pieces = text.split(",") if text.strip() else []
    for piece in pieces:
        argument = _ARGUMENT.fullmatch(piece)
        if argument is None:
            return None
        name, value = (argument[1] or "").lower(), argument[2]
        if not name and value.lower() in columns and not found:
            continue
        if not _NUMBER.fullmatch(value):
            return None
        found.append((name, float(value)))
    return found


def _parameters(
    caller: str, text: str, function: Function, given: list[tuple[str, float]]
) -> tuple[float, ...]:
    """The value of each parameter, checked."""
    names = [parameter.name for parameter in function.parameters]
    values: dict[str, float] = {}
    for place, (name, value) in enumerate(given):
        known = name or (names[place] if place < len(names) else "")
        if known not in names or known in values:
            raise ParameterError(
                f"{caller}: statistic '{text}' does not fit {function.signature}; "
                f"write its parameters in that order."
            )
        values[known] = value
    for parameter in function.parameters:
        if parameter.name not in values:
            if not isinstance(parameter.default, int | float):
                raise ParameterError(
                    f"{caller}: statistic '{text}' lacks {parameter.name}, which must be "
                    f"{parameter.allowed}; write for example "
                    f"'{function.name}({parameter.example()})'."
                )
            values[parameter.name] = float(parameter.default)
        parameter.check(
            f"{caller}: {function.name}", np.array([values[parameter.name]]), np.array([False])
        )
    return tuple(values[name] for name in names)


def kernel(*arguments: Any) -> float:
    """Stands for the kernel of a statistic."""
    raise TypeError("replaced when a loop is compiled")


def statistic(*_arguments: Any) -> float:
    """Stands for a statistic of sorted values, or of pairs, in loops to be compiled."""
    raise TypeError("replaced when a loop is compiled")


@compiled
def _statistic_x0(x: Values, p: Values) -> float:
    return kernel(x)


@compiled
def _statistic_x1(x: Values, p: Values) -> float:
    return kernel(x, p[0])


@compiled
def _statistic_x2(x: Values, p: Values) -> float:
    return kernel(x, p[0], p[1])


@compiled
def _statistic_yx0(y: Values, x: Values, p: Values) -> float:
    return kernel(y, x)


@compiled
def _statistic_yx1(y: Values, x: Values, p: Values) -> float:
    return kernel(y, x, p[0])


@compiled
def _statistic_yx2(y: Values, x: Values, p: Values) -> float:
    return kernel(y, x, p[0], p[1])


_ADAPTERS: Final[dict[int, tuple[Callable[..., float], ...]]] = {
    1: (_statistic_x0, _statistic_x1, _statistic_x2),
    2: (_statistic_yx0, _statistic_yx1, _statistic_yx2),
}
"""By the number of columns, then of parameters."""


def compiled_for(
    template: Callable[..., Any], function: Function, signature: str
) -> Callable[..., Any]:
    """Compile a loop that calls the global name ``statistic(x, p)`` for one statistic.

    For a statistic of two columns it calls ``statistic(y, x, p)``.

    Parameters
    ----------
    template : callable
        The loop; its name and the function's make the name it is kept under.
    function : Function
        A function of one column, or of two, with a single number as result.
    signature : str
        numba's signature of the loop.
    """
    assert function.kernel is not None
    replacements = {
        "statistic": _ADAPTERS[len(function.columns)][len(function.parameters)],
        "kernel": function.kernel,
    }
    name = f"{template.__name__.strip('_')}_{function.name}"
    return compile_driver(template, replacements, name, signature)
