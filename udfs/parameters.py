"""Parameters of functions: what they may be, and the sentence when they are something else."""

from dataclasses import dataclass
from typing import Any, Final, Literal

import numpy as np
import numpy.typing as npt

ParameterKind = Literal["number", "text", "flag", "level", "column", "free"]

OPTIONAL: Final = "NULL"
"""The default of a parameter that may be left out and then is not given at all."""


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
        A number, or an SQL literal given as text (`OPTIONAL` for NULL); None when required.
    low, high : float
        Smallest and largest value allowed.
    low_open, high_open : bool
        Whether the end itself is excluded.
    whole : bool
        Whether only whole numbers are allowed.
    kind : str
        ``number``; ``text`` and ``flag`` (true or false); ``level``: a value of the column label;
        ``column``: a further column, collected like the others; ``free``: an SQL literal that
        the function itself reads (table functions).
    choices : tuple of str
        For text: what it may be; empty when the function itself reads it.
    """

    name: str
    meaning: str
    default: float | str | bool | None = None
    low: float = -np.inf
    high: float = np.inf
    low_open: bool = False
    high_open: bool = False
    whole: bool = False
    kind: ParameterKind = "number"
    choices: tuple[str, ...] = ()

    @property
    def is_optional(self) -> bool:
        """Whether NULL may be given for it."""
        return self.default == OPTIONAL

    @property
    def allowed(self) -> str:
        """The range in words, as error messages and the reference give it."""
        if self.kind == "text":
            return _listed(self.choices) if self.choices else "a text"
        if self.kind == "flag":
            return "true or false"
        if self.kind == "level":
            return "a value of label"
        if self.kind == "column":
            return "a column"
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

    def check(
        self, function: str, values: npt.NDArray[np.float64], missing: npt.NDArray[np.bool_]
    ) -> None:
        """Raise ParameterError, naming function and range, unless all numbers are allowed."""
        if missing.any():
            if not self.is_optional:
                raise self.refused(function, "NULL", "give each group a value.")
            values = values[~missing]
        ok = (values > self.low) if self.low_open else (values >= self.low)
        ok &= (values < self.high) if self.high_open else (values <= self.high)
        ok &= np.isfinite(values)
        if self.whole:
            ok &= values == np.floor(values)
        if not ok.all():
            raise self.refused(function, shown(float(values[~ok][0])))

    def check_text(self, function: str, given: Any) -> str:
        """The text given, or the choice it names in other case; ParameterError if it is none."""
        if isinstance(given, str) and not self.choices:
            return given
        if isinstance(given, str) and given.strip().lower() in self.choices:
            return given.strip().lower()
        shown = f"'{given}'" if isinstance(given, str) else "NULL" if given is None else str(given)
        raise self.refused(function, shown)

    def refused(self, function: str, given: str, remedy: str | None = None) -> ParameterError:
        """The error about what was given."""
        remedy = remedy or f"write for example {self.name} := {self.example()}."
        return ParameterError(
            f"{function}: {self.name} must be {self.allowed}, got {given}; {remedy}"
        )

    def example(self) -> str:
        """A value that may be given, as SQL."""
        if isinstance(self.default, bool):
            return str(self.default).lower()
        if isinstance(self.default, int | float):
            return f"{self.default:g}"
        if isinstance(self.default, str) and not self.is_optional:
            return self.default
        if self.kind == "text":
            return f"'{self.choices[0]}'" if self.choices else "'…'"
        middle = (self.low + self.high) / 2
        if np.isfinite(middle):
            return f"{middle:g}"
        return f"{self.low:g}" if np.isfinite(self.low) and not self.low_open else "1"

    @property
    def default_text(self) -> str:
        """The default as SQL; empty when there is none."""
        if self.default is None:
            return ""
        if isinstance(self.default, bool):
            return str(self.default).lower()
        return self.default if isinstance(self.default, str) else f"{self.default:g}"


def _listed(choices: tuple[str, ...]) -> str:
    quoted = [f"'{choice}'" for choice in choices]
    return quoted[0] if len(quoted) == 1 else f"{', '.join(quoted[:-1])} or {quoted[-1]}"
