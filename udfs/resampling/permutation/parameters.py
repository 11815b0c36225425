"""Parameters that the permutation tests share."""

from typing import Final

from midspread.udfs.parameters import OPTIONAL, Parameter
from midspread.udfs.resampling.statistics import STATISTIC

ALTERNATIVES: Final = ("two-sided", "greater", "less")

ALTERNATIVE: Final = Parameter(
    "alternative",
    "which differences count as extreme: of either sign, or above or below the usual",
    "'two-sided'",
    kind="text",
    choices=ALTERNATIVES,
)
RESAMPLES: Final = Parameter(
    "resamples",
    "so many arrangements are drawn, or all of them when there are no more",
    default=9999,
    low=1,
    high=10_000_000,
    whole=True,
)
STRATUM: Final = Parameter(
    "stratum",
    "a column: rows are rearranged only among those with the same value of it",
    OPTIONAL,
    kind="column",
)


def statistic_parameter(default: str) -> Parameter:
    """The parameter statistic with another default."""
    return Parameter(STATISTIC.name, STATISTIC.meaning, f"'{default}'", kind="text")
