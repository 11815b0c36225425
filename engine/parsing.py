"""What the engine itself reads in a piece of SQL: its tokens and its syntax tree.

DuckDB's own parser decides what a statement means, so its tree, not another parser's, is what is
guarded and rewritten; each call in it carries the place of its text.
"""

import json
import sys
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import duckdb

Node = Mapping[str, Any]

_DEEPEST_TREE = 12_000


class NotParsed(Exception):
    """DuckDB cannot read the text, or will not show its tree.

    Attributes
    ----------
    reason : str
        DuckDB's own words.
    position : int or None
        Where, as an index into the text.
    is_syntax : bool
        Whether the text is no SQL at all (else it is SQL whose tree cannot be shown).
    """

    def __init__(self, reason: str, position: int | None, is_syntax: bool) -> None:
        super().__init__(reason)
        self.reason = reason
        self.position = position
        self.is_syntax = is_syntax


@dataclass(frozen=True)
class Token:
    """A word, operator or literal and its place in the text; comments are no tokens."""

    text: str
    start: int
    stop: int
    is_keyword: bool
    is_name: bool = False

    def says(self, *words: str) -> bool:
        """Whether this is one of these unquoted words or operators, given in upper case."""
        return self.text.upper() in words


class ByteOffsets:
    """Turns DuckDB's byte offsets into indices of a Python string."""

    def __init__(self, text: str) -> None:
        self._index_of_byte: dict[int, int] | None = None
        if not text.isascii():
            byte, table = 0, {}
            for index, character in enumerate(text):
                table[byte] = index
                byte += len(character.encode())
            table[byte] = len(text)
            self._index_of_byte = table

    def index(self, byte: int) -> int:
        """The character that starts at this byte."""
        return byte if self._index_of_byte is None else self._index_of_byte[byte]


def tokens(text: str) -> tuple[Token, ...]:
    """Split SQL into DuckDB's own tokens.

    Examples
    --------
    >>> [token.text for token in tokens("SELECT a::INT -- why")]
    ['SELECT', 'a', '::', 'INT']
    """
    offsets = ByteOffsets(text)
    kinds = [(offsets.index(byte), kind) for byte, kind in duckdb.tokenize(text)]
    ends = [*(start for start, _ in kinds[1:]), len(text)]
    found = []
    for (start, kind), end in zip(kinds, ends, strict=False):
        if kind == duckdb.token_type.comment:
            continue
        word = text[start:end].rstrip()
        if not word:
            continue
        found.append(
            Token(
                word,
                start,
                start + len(word),
                kind == duckdb.token_type.keyword,
                kind == duckdb.token_type.identifier,
            )
        )
    return tuple(found)


def unquoted(name: str) -> str:
    """The name that an identifier as written stands for."""
    if len(name) > 1 and name[0] == name[-1] == '"':
        return name[1:-1].replace('""', '"')
    return name


def quoted(name: str) -> str:
    """A name as a quoted identifier."""
    return '"' + name.replace('"', '""') + '"'


def literal(text: str) -> str:
    """A text as an SQL string."""
    return "'" + text.replace("'", "''") + "'"


def one_value(
    connection: duckdb.DuckDBPyConnection, sql: str, parameters: Sequence[object] = ()
) -> Any:
    """The one value that a query gives; None when it gives no row."""
    # A result that is not fetched to its end would bar the connection for relations.
    rows = connection.execute(sql, list(parameters)).fetchall()
    return rows[0][0] if rows else None


@dataclass(frozen=True)
class Tree:
    """DuckDB's syntax tree of one query and the text it was read from."""

    text: str
    root: Node
    offsets: ByteOffsets

    def span(self, node: Node) -> tuple[int, int] | None:
        """Where a node's text stands, if the parser kept it."""
        start, length = node.get("query_location"), node.get("query_location_length")
        if not isinstance(start, int) or not isinstance(length, int) or length == 0:
            return None
        try:
            return self.offsets.index(start), self.offsets.index(start + length)
        except KeyError:
            return None


def parse(connection: duckdb.DuckDBPyConnection, text: str) -> Tree:
    """DuckDB's syntax tree of one query (SELECT in any of its forms).

    Raises
    ------
    NotParsed
        When the text is no SQL, no query, or one whose tree DuckDB cannot show.
    """
    answer = _loads(one_value(connection, "SELECT json_serialize_sql(?::VARCHAR)", [text]))
    offsets = ByteOffsets(text)
    if answer.get("error"):
        raise _not_parsed(answer, offsets)
    statements = answer["statements"]
    if len(statements) != 1:
        raise NotParsed(f"{len(statements)} statements where one was expected", None, False)
    return Tree(text, statements[0]["node"], offsets)


def _not_parsed(answer: Node, offsets: ByteOffsets) -> NotParsed:
    position = None
    if str(answer.get("position", "")).isdigit():
        try:
            position = offsets.index(int(answer["position"]))
        except KeyError:
            position = None
    return NotParsed(
        str(answer.get("error_message", "")), position, answer.get("error_type") == "parser"
    )


def _loads(text: str) -> Any:
    before = sys.getrecursionlimit()
    sys.setrecursionlimit(max(before, _DEEPEST_TREE))
    try:
        return json.loads(text)
    except RecursionError:
        raise NotParsed("the expression is nested too deeply", None, False) from None
    finally:
        sys.setrecursionlimit(before)


def expression_text(connection: duckdb.DuckDBPyConnection, node: Node) -> str:
    """An expression as DuckDB writes it, which is also the name it gives an unnamed column."""
    select: Node = {
        "type": "SELECT_NODE",
        "modifiers": [],
        "cte_map": {"map": []},
        "select_list": [node],
        "from_table": {"type": "EMPTY", "alias": "", "sample": None, "query_location": 0},
        "where_clause": None,
        "group_expressions": [],
        "group_sets": [],
        "aggregate_handling": "STANDARD_HANDLING",
        "having": None,
        "sample": None,
        "qualify": None,
    }
    statement = {"error": False, "statements": [{"node": select, "named_param_map": []}]}
    select_text = one_value(
        connection, "SELECT json_deserialize_sql(?::JSON)", [json.dumps(statement)]
    )
    return str(select_text).removeprefix("SELECT ")


def nodes(root: Any) -> Iterator[Node]:
    """Every node of a tree, parents before children."""
    waiting = [root]
    while waiting:
        item = waiting.pop()
        if isinstance(item, dict):
            yield item
            waiting.extend(item.values())
        elif isinstance(item, list):
            waiting.extend(item)


def function_name(node: Node) -> str | None:
    """The lower-case name of the function a node calls, if it calls one."""
    name = node.get("function_name")
    return name.lower() if isinstance(name, str) and name else None


def without_places(node: Any) -> Any:
    """A node without the places of its text: equal for equal SQL, however it is spaced."""
    if isinstance(node, dict):
        return {
            key: without_places(value)
            for key, value in node.items()
            if key not in ("query_location", "query_location_length")
        }
    if isinstance(node, list):
        return [without_places(item) for item in node]
    return node


def brackets(found: tuple[Token, ...]) -> list[int]:
    """For each token the index of the opening bracket around it, -1 at the outermost level.

    An opening bracket counts as outside its own contents, a closing one likewise.
    """
    around, opened = [], [-1]
    for index, token in enumerate(found):
        if token.text in (")", "]", "}") and len(opened) > 1:
            opened.pop()
        around.append(opened[-1])
        if token.text in ("(", "[", "{"):
            opened.append(index)
    return around
