"""What the table functions that compare the levels of a label share."""

from typing import Any

import numpy as np

from midspread.udfs.declaring import Parameter, ParameterError
from midspread.udfs.tables.relations import quoted_text

LEVEL = "_midspread_label"
"""The column of levels in the queries written here."""


def checked_number(function: str, parameter: Parameter, given: object) -> float:
    """One number within the parameter's range."""
    if isinstance(given, bool) or not isinstance(given, int | float):
        shown = "NULL" if given is None else repr(given)
        raise parameter.refused(function, shown)
    parameter.check(function, np.array([float(given)]), np.array([False]))
    return float(given)


def is_level(function: str, given: Any) -> str:
    """A condition on `LEVEL` that holds for one level, given as text, number, date or boolean.

    Compared as text, so that a level of any type can be named, and as a number where it is one.
    """
    if isinstance(given, bool):
        return f"CAST({LEVEL} AS VARCHAR) = '{str(given).lower()}'"
    if isinstance(given, int | float):
        return f"TRY_CAST(CAST({LEVEL} AS VARCHAR) AS DOUBLE) = {given!r}"
    if isinstance(given, str):
        return f"CAST({LEVEL} AS VARCHAR) = {quoted_text(given)}"
    raise ParameterError(
        f"{function}: baseline must be a value of label, got {given!r}; "
        f"write for example baseline := 'cash box'."
    )


def shown_level(given: object) -> str:
    """A level as messages give it."""
    return f"'{given}'" if isinstance(given, str) else str(given)
