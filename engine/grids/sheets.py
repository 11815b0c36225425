"""Rows of text from a CSV or xlsx file, for `enter --from`."""

from datetime import date, datetime, time
from pathlib import Path
from typing import Any

import duckdb

from midspread.engine.errors import MidspreadError, UsageError

Texts = list[list[str | None]]


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
    with duckdb.connect() as engine:
        try:
            relation = engine.execute(
                "FROM read_csv($1, header = true, all_varchar = true, nullstr = '',"
                " allow_quoted_nulls = false)",
                [str(path)],
            )
            names = [str(column[0]) for column in relation.description or ()]
            return names, [list(row) for row in relation.fetchall()]
        except duckdb.Error as error:
            reason = str(error).split("\n", 1)[0].rstrip(".")
            raise MidspreadError(
                f"enter: {path} cannot be read as CSV ({reason}); correct the file."
            ) from None


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
