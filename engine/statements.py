"""A script split into statements, and what each of them is.

The text of a statement stays the user's own; a statement only says where in it the query stands
that may have to be guarded and rewritten.
"""

from dataclasses import dataclass
from enum import Enum

import duckdb

from midspread.engine.errors import MidspreadError
from midspread.engine.parsing import Token, brackets, tokens, unquoted


class Kind(Enum):
    """What a statement does."""

    QUERY = "query"
    EXPLAIN = "explain"
    VIEW = "view"
    MACRO = "macro"
    VARIABLE = "variable"
    SETTING = "setting"
    USE = "use"
    OTHER = "other"


@dataclass(frozen=True)
class Statement:
    """One statement of a script.

    Attributes
    ----------
    text : str
        The user's own text, without the semicolon.
    start : int
        Where it begins in the script.
    kind : Kind
        What it does; OTHER for everything a session refuses.
    engine_type : str
        DuckDB's name for the type of statement.
    name : str
        Of the view, macro, variable or setting.
    body : tuple of int
        Where in the text the query or expression stands.
    is_expression : bool
        Whether the body is an expression rather than a query.
    """

    text: str
    start: int
    kind: Kind
    engine_type: str = "SELECT"
    name: str = ""
    body: tuple[int, int] = (0, 0)
    is_expression: bool = False

    @property
    def answers(self) -> bool:
        """Whether running it gives rows."""
        return self.kind in (Kind.QUERY, Kind.EXPLAIN)

    @property
    def body_text(self) -> str:
        """The query or expression in it."""
        return self.text[self.body[0] : self.body[1]]

    @property
    def first_word(self) -> str:
        """The first word, in upper case, for messages."""
        found = tokens(self.text)
        return found[0].text.upper() if found else ""


def split(connection: duckdb.DuckDBPyConnection, script: str) -> list[Statement]:
    """The statements of a script, in order; the connection only parses them.

    Examples
    --------
    >>> script = "CREATE TEMP VIEW v AS SELECT 1; FROM v"
    >>> [statement.kind.value for statement in split(duckdb.connect(), script)]
    ['view', 'query']

    Raises
    ------
    duckdb.ParserException
        When the script is no SQL.
    MidspreadError
        When the script holds no statement or a character that no script can hold.
    """
    if "\x00" in script:
        raise MidspreadError("query: the SQL holds a NUL character, which must be taken out.")
    types = _types(connection, script)
    pieces = _pieces(script)
    if not pieces:
        raise MidspreadError("query: the SQL holds no statement; write one, for example SELECT 1.")
    if len(types) != len(pieces):
        raise MidspreadError("query: the statements cannot be told apart; run them one at a time.")
    return [
        _statement(script[piece[0].start : piece[-1].stop], piece[0].start, engine_type)
        for piece, engine_type in zip(pieces, types, strict=True)
    ]


def _types(connection: duckdb.DuckDBPyConnection, script: str) -> list[str]:
    try:
        return [statement.type.name for statement in connection.extract_statements(script)]
    except ValueError:
        # The Python package knows no name for some of the engine's statement types.
        raise MidspreadError(
            "query: the SQL holds a kind of statement that is not supported here; use SELECT."
        ) from None


def _pieces(script: str) -> list[list[Token]]:
    pieces: list[list[Token]] = [[]]
    for token in tokens(script):
        if token.text == ";":
            pieces.append([])
        else:
            pieces[-1].append(token)
    return [piece for piece in pieces if piece]


def _statement(text: str, start: int, engine_type: str) -> Statement:
    found = tokens(text)
    whole = (0, len(text))
    if engine_type == "EXPLAIN" or found[0].says("EXPLAIN"):
        body = (found[_explained(found)].start, len(text))
        return Statement(text, start, Kind.EXPLAIN, engine_type, body=body)
    if engine_type == "SELECT" or (engine_type == "MULTI" and not found[0].says("PRAGMA")):
        return Statement(text, start, Kind.QUERY, engine_type, body=whole)
    shaped = None
    if engine_type == "CREATE":
        shaped = _created(text, start, found)
    elif engine_type in ("SET", "VARIABLE_SET"):
        shaped = _set(text, start, found)
    return shaped or Statement(text, start, Kind.OTHER, engine_type)


def _explained(found: tuple[Token, ...]) -> int:
    """Where the statement behind EXPLAIN begins."""
    index = 1
    if index < len(found) and found[index].says("ANALYZE"):
        index += 1
    elif index + 1 < len(found) and found[index].text == "(":
        inside = found[index + 1]
        if inside.says("ANALYZE", "FORMAT"):
            while found[index].text != ")":
                index += 1
            index += 1
    return min(index, len(found) - 1)


def _created(text: str, start: int, found: tuple[Token, ...]) -> Statement | None:
    """A temporary view or macro; None for whatever else is created."""
    index = 1
    if found[index].says("OR"):
        index += 2
    if not found[index].says("TEMP", "TEMPORARY"):
        return None
    index += 1
    if not found[index].says("VIEW", "MACRO", "FUNCTION"):
        return None
    kind = Kind.VIEW if found[index].says("VIEW") else Kind.MACRO
    index += 1
    if found[index].says("IF"):
        index += 3
    around = brackets(found)
    behind_as = next(
        (i + 1 for i in range(index, len(found)) if found[i].says("AS") and around[i] == -1), None
    )
    if behind_as is None or behind_as >= len(found):
        return None
    name = unquoted(_last_of_dotted(found, index))
    is_expression = kind is Kind.MACRO
    if is_expression and found[behind_as].says("TABLE"):
        behind_as += 1
        is_expression = False
    if behind_as >= len(found):
        return None
    body = (found[behind_as].start, len(text))
    return Statement(text, start, kind, "CREATE", name, body, is_expression)


def view_body(sql: str) -> str:
    """The query in a statement that creates a view, as the engine's catalogue keeps it."""
    found = tokens(sql)
    around = brackets(found)
    first = next(
        (i + 1 for i, token in enumerate(found) if token.says("AS") and around[i] == -1), 0
    )
    last = -1 if found[-1].text != ";" else -2
    return sql[found[first].start : found[last].stop]


def _last_of_dotted(found: tuple[Token, ...], index: int) -> str:
    while index + 2 < len(found) and found[index + 1].text == ".":
        index += 2
    return found[index].text


def _set(text: str, start: int, found: tuple[Token, ...]) -> Statement | None:
    """USE, SET and RESET; None for forms that a session does not take."""
    if found[0].says("USE"):
        return Statement(text, start, Kind.USE, "SET", text[found[1].start :])
    index = 1
    if found[index].says("VARIABLE"):
        name = unquoted(found[index + 1].text)
        if found[0].says("RESET"):
            return Statement(text, start, Kind.SETTING, "SET", "variable")
        body = (found[index + 3].start, len(text)) if len(found) > index + 3 else (0, 0)
        return Statement(text, start, Kind.VARIABLE, "SET", name, body, is_expression=True)
    if found[index].says("SESSION", "GLOBAL", "LOCAL"):
        index += 1
    if found[index].says("TIME") and found[index + 1].says("ZONE"):
        name, value = "timezone", found[index + 2 :]
    else:
        name, value = unquoted(found[index].text).lower(), found[index + 1 :]
        if value and value[0].text.upper() in ("=", "TO"):
            value = value[1:]
    is_plain = len(value) == 1 or (len(value) == 2 and value[0].text == "-")
    if found[0].says("RESET") or (is_plain and found[0].says("SET")):
        return Statement(text, start, Kind.SETTING, "SET", name)
    return None
