"""Rows of text from a CSV or xlsx file, for `enter --from`."""

import csv
import re
from datetime import date, datetime, time
from pathlib import Path
from typing import Any, Final

import duckdb

from midspread.engine.errors import MidspreadError, UsageError

Texts = list[list[str | None]]
_SEPARATORS: Final = (",", ";", "\t")


def read_sheet(path: Path) -> tuple[list[str], Texts]:
    """The header and the rows of a file, every value as text.

    In a CSV file an empty field is NULL and ``""`` an empty text; in an xlsx file an empty cell is
    NULL.

    Raises
    ------
    MidspreadError
        When there is no such file, or it cannot be read.
    """
    ending = path.suffix.lower()
    if ending not in (".csv", ".xlsx"):
        raise UsageError(
            f"enter: --from takes a .csv or .xlsx file, got {path}; save the values as one."
        )
    if not path.is_file():
        raise MidspreadError(f"enter: there is no file {path}; check the path.")
    header, rows = _csv(path) if ending == ".csv" else _xlsx(path)
    if not header or any(not name for name in header):
        raise MidspreadError(
            f"enter: the first row of {path} must name every column; add the names."
        )
    return header, rows


def _csv(path: Path) -> tuple[list[str], Texts]:
    """Read with the header's own separator: the engine would guess one anew from odd rows."""
    try:
        with path.open(encoding="utf-8-sig", newline="") as file:
            first = file.readline()
    except (OSError, UnicodeDecodeError) as error:
        raise _unreadable(path, str(error)) from None
    separator = max(_SEPARATORS, key=first.count)
    names = [name.strip() for name in next(csv.reader([first], delimiter=separator), [])]
    with duckdb.connect() as engine:
        try:
            rows = engine.execute(
                "FROM read_csv($1, header = true, auto_detect = false, columns = $2, delim = $3,"
                " quote = '\"', escape = '\"', nullstr = '', allow_quoted_nulls = false)",
                [str(path), {f"c{i}": "VARCHAR" for i in range(len(names))}, separator],
            ).fetchall()
        except duckdb.Error as error:
            raise _unreadable(path, _reason(str(error))) from None
    return names, [list(row) for row in rows]


def _reason(text: str) -> str:
    """The engine's complaint about a CSV file, shortened."""
    line = re.search(r"CSV Error on Line: (\d+)", text)
    counts = re.search(r"Expected Number of Columns: (\d+) Found: (\d+)", text)
    if line and counts:
        return f"line {line[1]} has {counts[2]} values where the header names {counts[1]}"
    return text.split("\n", 1)[0].rstrip(".")


def _unreadable(path: Path, reason: str) -> MidspreadError:
    return MidspreadError(f"enter: {path} cannot be read as CSV ({reason}); correct the file.")


def _xlsx(path: Path) -> tuple[list[str], Texts]:
    import openpyxl

    try:
        book = openpyxl.load_workbook(path, read_only=True, data_only=True)
    except Exception as error:
        raise MidspreadError(
            f"enter: {path} cannot be read as a workbook ({error}); save it again as .xlsx."
        ) from None
    try:
        lines = [list(row) for row in book.worksheets[0].iter_rows(values_only=True)]
    finally:
        book.close()
    if not lines:
        return [], []
    header = ["" if name is None else str(name).strip() for name in lines[0]]
    rows = [[_text(value) for value in line] for line in lines[1:]]
    return header, [row for row in rows if any(value is not None for value in row)]


def _text(value: Any) -> str | None:
    if value is None:
        return None
    if isinstance(value, datetime):
        is_day = value.time() == time()
        return value.date().isoformat() if is_day else value.isoformat(sep=" ")
    if isinstance(value, date | time):
        return value.isoformat()
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, float) and value.is_integer():
        return str(int(value))
    return str(value)
