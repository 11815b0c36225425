"""What table functions share: their arguments turned into SQL text, every name quoted."""

import re
from collections.abc import Iterable, Sequence
from typing import Final

import numpy as np

from midspread.udfs.declaring import Parameter, ParameterError

BY: Final = Parameter("by", "columns whose values split the rows: a list or one name", "[]")

UNIT: Final = Parameter(
    "unit", "the column that says which rows belong together, such as a vehicle or a day", "NULL"
)

_FILE_ENDINGS: Final = frozenset(
    {"parquet", "csv", "tsv", "txt", "json", "jsonl", "ndjson", "gz", "zst", "bz2", "xlsx"}
    | {"arrow", "arrows", "db", "duckdb"}
)
_PLAIN_NAME: Final = r"[^\W\d]\w*"
_PART: Final = re.compile(rf'{_PLAIN_NAME}|"(?:[^"]|"")+"')
_DOTTED_NAME: Final = re.compile(rf"(?:{_PART.pattern})(?:\.(?:{_PART.pattern})){{1,2}}")
_FUNCTION_CALL: Final = re.compile(r"[^\W\d]\w*(\.[^\W\d]\w*)*\s*\(.*\)", re.DOTALL)


def quoted_name(name: str) -> str:
    """A column or table name as an SQL identifier."""
    return '"' + name.replace('"', '""') + '"'


def quoted_text(text: str) -> str:
    """A text as an SQL literal."""
    return "'" + text.replace("'", "''") + "'"


def relation(function: str, tbl: object) -> str:
    """The table behind `tbl`: a table, view, CTE, file, glob, function call or subquery.

    Text in parentheses, a call such as ``read_csv('f.csv')`` and a quoted name stand as they
    are; a dotted name is split unless it ends like a file; all else is one name, which the
    engine looks up among CTEs, tables, views and files.
    """
    if not isinstance(tbl, str) or not tbl.strip():
        raise ParameterError(
            f"{function}: tbl must be the name of a table, view or file, or a query in "
            f"parentheses, got {tbl!r}; write for example {function}('dwell/*.parquet', …)."
        )
    text = tbl.strip()
    if re.search(rf"\b{function}\s*\(", text, re.IGNORECASE):
        raise ParameterError(
            f"{function}: tbl must not call {function} itself; put the inner call before it, "
            f"WITH earlier AS (FROM {function}(…)), and write {function}('earlier', …)."
        )
    if text.startswith(("(", '"')) or _FUNCTION_CALL.fullmatch(text):
        return text
    ending = text.rsplit(".", 1)[-1].lower()
    if _DOTTED_NAME.fullmatch(text) and ending not in _FILE_ENDINGS:
        parts = _PART.findall(text)
        return ".".join(part if part.startswith('"') else quoted_name(part) for part in parts)
    return quoted_name(text)


def column(function: str, argument: str, name: object) -> str:
    """One column name, quoted."""
    if not isinstance(name, str) or not name:
        raise ParameterError(
            f"{function}: {argument} must be the name of a column, got {name!r}; "
            f"write for example {argument} := 'dwell_s'."
        )
    return quoted_name(name)


def names(function: str, argument: str, given: object) -> list[str]:
    """Column names given as a list, as one name, or as NULL for none."""
    if given is None:
        return []
    listed = [given] if isinstance(given, str) else given
    if not isinstance(listed, list) or not all(isinstance(n, str) and n for n in listed):
        raise ParameterError(
            f"{function}: {argument} must be a column name or a list of them, got {given!r}; "
            f"write for example {argument} := ['route', 'day_part']."
        )
    seen: set[str] = set()
    for name in listed:
        if name.lower() in seen:
            raise ParameterError(
                f"{function}: {argument} names {name} twice; name each column once."
            )
        seen.add(name.lower())
    return listed


def keys(function: str, by: object, result_columns: Iterable[str]) -> list[str]:
    """The columns to split by; a key named like a result column is refused."""
    listed = names(function, "by", by)
    taken = {name.lower() for name in result_columns}
    for name in listed:
        if name.lower() in taken:
            raise ParameterError(
                f"{function}: by names {name}, which is also a column of the result; rename it "
                f"first, for example tbl := '(SELECT *, {name} AS {name}_key FROM …)'."
            )
    return listed


def flag(function: str, argument: str, given: object) -> bool:
    """A yes or no."""
    if not isinstance(given, bool):
        raise ParameterError(
            f"{function}: {argument} must be true or false, got {given!r}; "
            f"write for example {argument} := true."
        )
    return given


def number(function: str, parameter: Parameter, given: object) -> float | None:
    """One number within a parameter's range; None where an optional one is left out."""
    if given is None and parameter.is_optional:
        return None
    if isinstance(given, bool) or not isinstance(given, int | float):
        raise parameter.refused(function, "NULL" if given is None else repr(given))
    parameter.check(function, np.array([float(given)]), np.array([False]))
    return float(given)


def number_list(
    function: str, argument: str, given: object, low: float, high: float
) -> list[float]:
    """A non-empty list of numbers within a range."""
    listed = given if isinstance(given, list) else [given]
    numbers = [float(v) for v in listed if isinstance(v, int | float) and not isinstance(v, bool)]
    if len(numbers) != len(listed) or not numbers or not all(low <= v <= high for v in numbers):
        raise ParameterError(
            f"{function}: {argument} must be numbers from {low:g} to {high:g}, got {given!r}; "
            f"write for example {argument} := [0, 0.1, 0.2]."
        )
    return numbers


def whole(function: str, parameter: Parameter, given: object) -> int:
    """A whole number within the range of a parameter that must be given."""
    found = number(function, parameter, given)
    assert found is not None
    return int(found)


def null_unit(function: str, name: str) -> str:
    """The sentence about a row that belongs to no unit."""
    return (
        f"{function}: unit must not be NULL, and {name} is in some rows; leave them out, for "
        f"example tbl := '(SELECT * FROM … WHERE {name} IS NOT NULL)'."
    )


def joined(parts: Sequence[str]) -> str:
    """Parts as the beginning of a list that goes on: each followed by a comma."""
    return "".join(f"{part}, " for part in parts)


def own_columns_differ(function: str, source: str, added: Iterable[str]) -> str:
    """A condition for functions that return whole rows: none of their columns has an added name."""
    listed = ", ".join(quoted_text(name) for name in added)
    start = quoted_text(f"{function}: the table has a column ")
    end = quoted_text(
        ", which is also a column of the result; rename it first, for example tbl := "
        "'(SELECT * RENAME (… AS …) FROM …)'."
    )
    return f"""(SELECT CASE WHEN count(*) > 0
        THEN error({start} || min(column_name) || {end}) ELSE true END
    FROM (DESCRIBE SELECT * FROM {source}) WHERE lower(column_name) IN ({listed}))"""
