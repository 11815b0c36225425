"""Values of a result as texts for a table, column by column."""

import datetime as dt
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from decimal import Decimal
from typing import TYPE_CHECKING, Any

from midspread.cli.numbers import decimal_texts, single_text, whole_texts

if TYPE_CHECKING:
    import pyarrow as pa

NULL = "NULL"
MOST_ITEMS = 100  # of a list
MOST_CHARACTERS = 2_000
# What a terminal would obey instead of showing: escape sequences, line ends, direction marks.
_UNSEEN = re.compile("[\x00-\x1f\x7f-\x9f\u200e\u200f\u2028-\u202e\u2066-\u2069\ud800-\udfff]")
_NAMED = {"\n": "\\n", "\t": "\\t", "\r": "\\r"}


@dataclass(frozen=True)
class Column:
    """One column of a table, ready to be laid out.

    Attributes
    ----------
    name : str
        The header.
    cells : list of str
        One text a row.
    nulls : frozenset of int
        The rows that hold NULL.
    is_number : bool
        Numbers stand to the right.
    is_measure : bool
        A number with decimals or a nested value: never a key that tells rows apart.
    """

    name: str
    cells: list[str]
    nulls: frozenset[int]
    is_number: bool = False
    is_measure: bool = False


def columns_of(table: "pa.Table") -> list[Column]:
    """Every column of an Arrow table as texts; a record takes a column for each of its fields."""
    columns = []
    for field, column in zip(table.schema, table.columns, strict=True):
        columns += _columns(field.name, column)
    return columns


def _columns(name: str, column: "pa.ChunkedArray") -> list[Column]:
    from pyarrow import types

    if not types.is_struct(column.type) or column.type.num_fields == 0:
        return [_column(name, column)]
    columns = []
    for field, part in zip(column.type, column.flatten(), strict=True):
        columns += _columns(f"{name}.{field.name}", part)
    return columns


def _column(name: str, column: "pa.ChunkedArray") -> Column:
    from pyarrow import types

    from midspread.engine.column_texts import plain_texts

    kind = column.type
    is_whole = types.is_integer(kind)
    is_number = bool(is_whole or types.is_floating(kind) or types.is_decimal(kind))
    if is_number or types.is_nested(kind):
        cells = texts(column.to_pylist())
    else:
        spelt = [text for chunk in column.chunks for text in plain_texts(chunk)]
        cells = [NULL if text is None else _told_apart(visible(text)) for text in spelt]
    nulls = frozenset(i for i, is_null in enumerate(column.is_null().to_pylist()) if is_null)
    for row in nulls:
        cells[row] = NULL
    is_measure = bool(types.is_nested(kind) or (is_number and not is_whole))
    return Column(visible(name), [_cut(cell) for cell in cells], nulls, is_number, is_measure)


def texts(values: Sequence[Any]) -> list[str]:
    """Texts for the values of one column; numbers get a common number of decimals."""
    given = [value for value in values if value is not None]
    if given and all(isinstance(v, int) and not isinstance(v, bool) for v in given):
        return whole_texts(values)
    if given and all(isinstance(v, float) for v in given):
        return decimal_texts(values)
    return ["" if value is None else _text(value) for value in values]


def _text(value: Any) -> str:
    """One value on its own or inside a nested one."""
    if value is None:
        return NULL
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, float):
        return single_text(value)
    if isinstance(value, Decimal):
        return _decimal_text(value)
    if isinstance(value, str):
        return visible(value)
    if isinstance(value, bytes):
        return "0x" + value.hex()
    if isinstance(value, dt.datetime):
        return value.isoformat(sep=" ")
    if isinstance(value, Mapping):
        return "{" + ", ".join(f"{visible(str(k))}: {_text(v)}" for k, v in value.items()) + "}"
    if isinstance(value, list):
        return _list_text(value)
    if isinstance(value, tuple):
        return ": ".join(_text(part) for part in value)
    return visible(str(value))


def _list_text(values: list[Any]) -> str:
    left_out = len(values) - MOST_ITEMS
    values = values[:MOST_ITEMS]
    more = [f"and {left_out:,} more"] if left_out > 0 else []
    if len(values) > 1 and all(isinstance(value, dict) for value in values):
        return "\n".join([_records_text(values), *more])
    if values and all(isinstance(v, int | float) and not isinstance(v, bool) for v in values):
        return "[" + ", ".join([*texts(values), *more]) + "]"
    return "[" + ", ".join([*(_text(value) for value in values), *more]) + "]"


def _records_text(records: list[dict[str, Any]]) -> str:
    """A list of records as a small table: a line of field names, then a line a record."""
    lines = [""] * (len(records) + 1)
    for field in records[0]:
        name = visible(field)
        cells = texts([record.get(field) for record in records])
        width = max(len(name), *map(len, cells))
        number = isinstance(records[0][field], int | float)
        for i, cell in enumerate([name, *cells]):
            lines[i] += (cell.rjust(width) if number else cell.ljust(width)) + "  "
    return "\n".join(line.rstrip() for line in lines)


def _decimal_text(value: Decimal) -> str:
    return f"{value:,f}" if abs(value) >= 10_000 else f"{value:f}"


def visible(text: str) -> str:
    """A text in which nothing is hidden from the eye or obeyed by a terminal."""
    return _UNSEEN.sub(lambda found: _NAMED.get(found[0], f"\\u{ord(found[0]):04x}"), text)


def _told_apart(text: str) -> str:
    """Quotes around a text that would look like NULL or whose ends do not show."""
    if text == NULL or text != text.strip():
        return f"'{text}'"
    return text


def _cut(text: str) -> str:
    """A text that does not flood the screen."""
    if len(text) <= MOST_CHARACTERS:
        return text
    return f"{text[:MOST_CHARACTERS]}… ({len(text):,} characters)"
