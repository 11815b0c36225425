"""What the table functions that compare the levels of a label share."""

from typing import Any, Final

import numpy as np

from midspread.udfs.declaring import Parameter, ParameterError
from midspread.udfs.tables.relations import quoted_text

LEVEL: Final = "_midspread_label"
"""The column of levels in the queries written here."""


CONFIDENCE: Final = Parameter(
    "confidence",
    "of the interval",
    default=0.95,
    low=0.0,
    high=1.0,
    low_open=True,
    high_open=True,
)


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


def known_baseline(function: str, label: object, baseline: object) -> str:
    """A form around the first column that complains when no group has the baseline."""
    if baseline is None:
        return "{}"
    shown = f"'{baseline}'" if isinstance(baseline, str) else str(baseline)
    # The sentence rests on a column, so that the engine does not work it out while it plans.
    said = quoted_text(
        f"{function}: baseline must be a value of label, got {shown}; {label} holds for example "
    )
    return (
        "CASE WHEN bool_or(_m_has_baseline) OVER () THEN {} "
        f"ELSE error({said} || CAST(_m_levels[1] AS VARCHAR) || '.') END"
    )
