"""Columns as users write them: ``remark TEXT``, ``allowance_s AS (limit_s + 2 * spread)``."""

import re
from typing import Final

import duckdb

from midspread.engine.errors import MidspreadError, UsageError
from midspread.engine.grids.model import Column, ColumnKind
from midspread.engine.parsing import NotParsed, Token, brackets, function_name, nodes, parse, tokens
from midspread.engine.parsing import unquoted as name_of

# A type is a word or several, with numbers in brackets and as a list: DECIMAL(10, 2), TEXT[].
_TYPE: Final = re.compile(
    r"[A-Za-z_][A-Za-z0-9_ ]*(\(\s*\d+(\s*,\s*\d+)*\s*\))?(\s+with\s+time\s+zone)?(\s*\[\s*\])*",
    re.IGNORECASE,
)


def listed_columns(
    connection: duckdb.DuckDBPyConnection, command: str, text: str
) -> tuple[Column, ...]:
    """The columns of ``route TEXT, share DOUBLE``.

    Raises
    ------
    UsageError
        When a name or type is missing, wrong or there twice.
    """
    columns: list[Column] = []
    for piece in _pieces(text):
        column = entered_column(connection, command, text[piece[0].start : piece[-1].stop])
        if any(column.name.casefold() == other.name.casefold() for other in columns):
            raise UsageError(f"{command}: the column {column.name} is there twice; name it once.")
        columns.append(column)
    if not columns:
        raise UsageError(
            f"{command}: there are no columns in {text!r}; write for example "
            f'"route TEXT, limit_s DOUBLE".'
        )
    return tuple(columns)


def one_column(connection: duckdb.DuckDBPyConnection, command: str, text: str) -> Column:
    """The column of ``remark TEXT`` or ``allowance_s AS (limit_s + 5)``; a computed one's type is
    found when it is added.
    """
    found = tokens(text)
    if len(found) > 2 and found[1].says("AS"):
        expression = text[found[2].start : found[-1].stop]
        if found[2].text != "(" or brackets(found)[2] != -1 or found[-1].text != ")":
            raise UsageError(
                f"{command}: the expression must stand in brackets; write for example "
                f'"{found[0].text} AS ({expression.strip("()")})".'
            )
        inside = text[found[2].stop : found[-1].start].strip()
        check_expression(connection, command, inside)
        return Column(name_of(found[0].text), "", ColumnKind.COMPUTED, inside)
    return entered_column(connection, command, text)


def entered_column(connection: duckdb.DuckDBPyConnection, command: str, text: str) -> Column:
    """The column of a name and a type."""
    found = tokens(text)
    kind = text[found[0].stop :].strip() if found else ""
    if len(found) < 2 or not _TYPE.fullmatch(kind):
        raise UsageError(
            f"{command}: a column is a name and a type of the engine, got {text.strip()!r}; write "
            f'for example "limit_s DOUBLE" or "remark TEXT".'
        )
    try:
        rows = connection.execute(f"SELECT typeof(CAST(NULL AS {kind}))").fetchall()
    except duckdb.Error:
        raise UsageError(
            f"{command}: {kind} is no type of the engine; write for example TEXT, DOUBLE, BIGINT, "
            f"DATE, TIMESTAMP or BOOLEAN."
        ) from None
    return Column(name_of(found[0].text), str(rows[0][0]), ColumnKind.ENTERED)


def check_expression(connection: duckdb.DuckDBPyConnection, command: str, expression: str) -> None:
    """Raise unless a text is one expression over a row's own columns."""
    try:
        root = parse(connection, f"SELECT ({expression})").root
    except NotParsed as error:
        raise MidspreadError(
            f"{command}: {expression!r} is no expression ({error.reason}); write one over the "
            f"row's columns, for example limit_s + 5."
        ) from None
    if root.get("type") != "SELECT_NODE" or len(root.get("select_list") or ()) != 1:
        raise MidspreadError(f"{command}: {expression!r} must be a single expression.")
    aggregates = _aggregates(connection)
    for node in nodes(root):
        name = function_name(node) or ""
        if node.get("class") in ("SUBQUERY", "WINDOW", "STAR") or name in aggregates:
            raise MidspreadError(
                f"{command}: {expression!r} must use only the row's own columns, no other rows and "
                f"no subquery; compute those in a grid's query and join it."
            )


def _aggregates(connection: duckdb.DuckDBPyConnection) -> frozenset[str]:
    from midspread.udfs import functions

    rows = connection.execute(
        "SELECT DISTINCT lower(function_name) FROM duckdb_functions() "
        "WHERE function_type = 'aggregate'"
    ).fetchall()
    own = {name for name, function in functions().items() if function.is_aggregate}
    return frozenset({name for (name,) in rows} | own)


def _pieces(text: str) -> list[list[Token]]:
    found = tokens(text)
    around = brackets(found)
    pieces: list[list[Token]] = [[]]
    for token, outer in zip(found, around, strict=True):
        if token.text == "," and outer == -1:
            pieces.append([])
        else:
            pieces[-1].append(token)
    return [piece for piece in pieces if piece]
