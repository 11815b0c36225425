"""Robust statistics as SQL functions: the catalogue, the kernels, the binding to DuckDB."""

from typing import TYPE_CHECKING, Any

from midspread.udfs.catalogue import functions
from midspread.udfs.declaring import Function, Parameter, ParameterError

if TYPE_CHECKING:
    from midspread.udfs.binding.registration import register
    from midspread.udfs.grouped import Control, Stopped

__all__ = [
    "Control",
    "Function",
    "Parameter",
    "ParameterError",
    "Stopped",
    "functions",
    "register",
]


def __getattr__(name: str) -> Any:
    # Looking up the catalogue must not load duckdb's and Arrow's libraries: a kept answer needs
    # neither.
    if name == "register":
        from midspread.udfs.binding.registration import register

        return register
    if name in ("Control", "Stopped"):
        from midspread.udfs import grouped

        return getattr(grouped, name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
