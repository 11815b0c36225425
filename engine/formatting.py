"""A result as text for machines and for documents: CSV, JSON, one JSON object a line, Markdown."""

import json
import re
from collections.abc import Callable, Iterator
from typing import TextIO

import pyarrow as pa
from pyarrow import types

from midspread.engine.column_texts import Texts, json_object, json_texts, plain_texts, unique_names
from midspread.engine.errors import UsageError

FORMATS = ("csv", "json", "ndjson", "markdown")
_BATCH_ROWS = 16_384
_NEEDS_QUOTES = re.compile(r'[",\r\n]|^\s|\s$|^$')
_MARKED = re.compile(r"([\\|*`<>\[\]])")


def write_text(table: pa.Table, form: str, stream: TextIO) -> None:
    """Write a result as text.

    Parameters
    ----------
    table : pyarrow.Table
        The result.
    form : {"csv", "json", "ndjson", "markdown"}
        CSV has a header, quotes where needed, ``""`` for an empty text and nothing for NULL.
        JSON is a list of objects; a second column of the same name gets a number. Markdown is a
        table with all digits.
    stream : text file
        Where it goes.

    Raises
    ------
    UsageError
        For any other form.
    """
    writers: dict[str, Callable[[pa.Table], Iterator[str]]] = {
        "csv": _csv,
        "json": _json,
        "ndjson": _ndjson,
        "markdown": _markdown,
    }
    if form not in writers:
        raise UsageError(f"There is no format {form!r}; choose one of {', '.join(FORMATS)}.")
    for piece in writers[form](table):
        stream.write(piece)


def _batches(table: pa.Table) -> Iterator[pa.RecordBatch]:
    return iter(table.to_batches(max_chunksize=_BATCH_ROWS))


def _csv(table: pa.Table) -> Iterator[str]:
    yield ",".join(_csv_field(name) for name in table.column_names) + "\n"
    # In a table of one column an empty line would be skipped by most readers.
    null = '""' if table.num_columns == 1 else ""
    for batch in _batches(table):
        columns = [
            [null if t is None else t if is_safe else _csv_field(t) for t in texts]
            for texts, is_safe in ((plain_texts(c), _never_needs_quotes(c.type)) for c in batch)
        ]
        yield "".join(",".join(row) + "\n" for row in zip(*columns, strict=True))


def _never_needs_quotes(kind: pa.DataType) -> bool:
    return bool(
        types.is_integer(kind)
        or types.is_floating(kind)
        or types.is_boolean(kind)
        or types.is_decimal(kind)
    )


def _csv_field(text: str) -> str:
    return '"' + text.replace('"', '""') + '"' if _NEEDS_QUOTES.search(text) else text


def _json_rows(table: pa.Table) -> Iterator[str]:
    keys = [json.dumps(name, ensure_ascii=False) for name in unique_names(table.column_names)]
    for batch in _batches(table):
        for row in zip(*map(json_texts, batch), strict=True):
            yield json_object(keys, row)


def _ndjson(table: pa.Table) -> Iterator[str]:
    for row in _json_rows(table):
        yield row + "\n"


def _json(table: pa.Table) -> Iterator[str]:
    before = "[\n  "
    for row in _json_rows(table):
        yield before + row
        before = ",\n  "
    yield "[]\n" if before.startswith("[") else "\n]\n"


def _markdown(table: pa.Table) -> Iterator[str]:
    yield _markdown_row([_marked(name) for name in table.column_names])
    yield _markdown_row(["---:" if _is_number(field.type) else "---" for field in table.schema])
    for batch in _batches(table):
        columns: list[Texts] = [plain_texts(column) for column in batch]
        for row in zip(*columns, strict=True):
            yield _markdown_row(["NULL" if text is None else _marked(text) for text in row])


def _markdown_row(cells: list[str]) -> str:
    return "| " + " | ".join(cells) + " |\n"


def _marked(text: str) -> str:
    return "<br>".join(_MARKED.sub(r"\\\1", text).splitlines())


def _is_number(kind: pa.DataType) -> bool:
    return bool(types.is_integer(kind) or types.is_floating(kind) or types.is_decimal(kind))
