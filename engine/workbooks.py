"""A result as an .xlsx workbook of one sheet."""

import contextlib
import datetime as dt
from collections.abc import Callable
from decimal import Decimal
from typing import IO, TYPE_CHECKING, Any

import pyarrow as pa
from pyarrow import types

from midspread.engine.column_texts import plain_texts
from midspread.engine.errors import MidspreadError

if TYPE_CHECKING:
    from openpyxl.worksheet._write_only import WriteOnlyWorksheet

# Limits of the format, as Microsoft's specification of Excel gives them.
MOST_ROWS = 1_048_576
MOST_COLUMNS = 16_384
MOST_CHARACTERS = 32_767
# A workbook's numbers are doubles, of which it shows 15 digits.
_MOST_DIGITS = 15
_FIRST_DATE = dt.date(1900, 3, 1)  # before it, programs disagree about the leap year 1900
_BATCH_ROWS = 16_384
_NOT_FINITE = {"nan": "NaN", "inf": "Infinity", "-inf": "-Infinity"}


def write_workbook(table: pa.Table, file: IO[bytes]) -> None:
    """Write a result as a workbook.

    Parameters
    ----------
    table : pyarrow.Table
        The result.
    file : binary file
        Where it goes.

    Raises
    ------
    MidspreadError
        When the result has more rows, columns or characters in a cell than a workbook takes.
    """
    from openpyxl import Workbook
    from openpyxl.styles import Font

    if table.num_rows >= MOST_ROWS:
        raise MidspreadError(
            f"query: {table.num_rows:,} rows do not fit into an .xlsx file, which takes "
            f"{MOST_ROWS - 1:,} below its header; write .csv or .parquet instead."
        )
    if table.num_columns > MOST_COLUMNS:
        raise MidspreadError(
            f"query: {table.num_columns:,} columns do not fit into an .xlsx file, which takes "
            f"{MOST_COLUMNS:,}; write .csv or .parquet instead."
        )
    book = Workbook(write_only=True)
    sheet = book.create_sheet("answer")
    sheet.freeze_panes = "A2"
    header = [_text_cell(sheet, name) for name in table.column_names]
    for cell in header:
        cell.font = Font(bold=True)
    sheet.append(header)
    try:
        for batch in table.to_batches(max_chunksize=_BATCH_ROWS):
            for row in zip(*(_values(column) for column in batch), strict=True):
                sheet.append([_text_cell(sheet, v) if isinstance(v, str) else v for v in row])
        book.save(file)
    except BaseException:
        with contextlib.suppress(Exception):
            sheet.close()  # else its writer complains on stderr when it is collected
        raise


def _text_cell(sheet: "WriteOnlyWorksheet", text: str) -> Any:
    """Make a cell that holds text, whatever the text looks like."""
    from openpyxl.cell import WriteOnlyCell
    from openpyxl.cell.cell import ILLEGAL_CHARACTERS_RE

    if len(text) > MOST_CHARACTERS:
        raise MidspreadError(
            f"query: a text of {len(text):,} characters does not fit into a cell of an .xlsx file, "
            f"which takes {MOST_CHARACTERS:,}; write .csv or .parquet instead."
        )
    cell = WriteOnlyCell(sheet, value=ILLEGAL_CHARACTERS_RE.sub("\ufffd", text))
    cell.data_type = "s"  # else "=1+1" would be a formula and "#N/A" an error
    return cell


def _values(column: pa.Array) -> list[Any]:
    """Values for the cells of a column; text where a workbook's own types would change them."""
    kind = column.type
    if types.is_boolean(kind):
        return list(column.to_pylist())
    numbers: Callable[[str], Any] | None = None
    if types.is_integer(kind):
        numbers = int
    elif types.is_floating(kind):
        numbers = float
    elif types.is_decimal(kind):
        numbers = Decimal
    texts = plain_texts(column)
    if numbers is not None:
        return [t if t is None else _number(t, numbers) for t in texts]
    if types.is_date(kind) or (types.is_timestamp(kind) and kind.tz is None):
        return [t if t is None else _moment(t) for t in texts]
    if types.is_time(kind):
        return [t if t is None else _time(t) for t in texts]
    return list(texts)


def _number(text: str, numbers: Callable[[str], Any]) -> Any:
    if text in _NOT_FINITE:
        return _NOT_FINITE[text]
    number = numbers(text)
    if numbers is float:
        return number
    digits = text.lstrip("-").replace(".", "").strip("0")
    return number if len(digits) <= _MOST_DIGITS else text


def _moment(text: str) -> Any:
    """Give a date or a timestamp, where a workbook shows it as it is: to the millisecond."""
    try:
        moment = dt.datetime.fromisoformat(text)
    except ValueError:
        return text
    if moment.date() < _FIRST_DATE or moment.microsecond % 1000 or _is_finer(text):
        return text
    return moment.date() if len(text) == 10 else moment


def _time(text: str) -> Any:
    time = dt.time.fromisoformat(text) if not _is_finer(text) else None
    return text if time is None or time.microsecond % 1000 else time


def _is_finer(text: str) -> bool:
    """Whether a time has more digits than microseconds take."""
    return len(text.partition(".")[2]) > 6
