"""Which tables a script reads by bare name: the grids among them are what it rests on."""

from collections.abc import Collection, Sequence
from typing import Any, Final

import duckdb

from midspread.engine.inputs.scanning import mentions_of
from midspread.engine.parsing import Node, NotParsed, function_name
from midspread.engine.pivoting import parse_with_pivots
from midspread.engine.statements import Kind, Statement, split

_OWN_SCHEMAS: Final = ("main", "temp", "memory")
_TEXT_TAKERS: Final = ("query", "query_table")


def tables_read(
    connection: duckdb.DuckDBPyConnection,
    statements: Sequence[Statement],
    table_functions: Collection[str],
) -> set[str]:
    """The folded names of tables that statements read; names of common table expressions are none.

    Parameters
    ----------
    connection : duckdb.DuckDBPyConnection
        Parses; runs nothing.
    statements : sequence of Statement
        Definitions and queries.
    table_functions : collection of str
        Our own, whose argument ``tbl`` names a table or is a query.

    Examples
    --------
    >>> from midspread.engine.statements import split
    >>> connection = duckdb.connect()
    >>> script = "WITH a AS (FROM limits) SELECT b FROM a"
    >>> tables_read(connection, split(connection, script), ())
    {'limits'}
    """
    reader = _Reader(connection, frozenset(table_functions))
    for statement in statements:
        if statement.body_text:
            before = "SELECT (" if statement.is_expression else ""
            reader.read(f"{before}{statement.body_text}{')' if before else ''}", frozenset())
    return reader.found


def qualifiers(
    connection: duckdb.DuckDBPyConnection, script: Sequence[str], table_functions: Collection[str]
) -> set[str]:
    """The folded first parts of the names of more than one part by which tables are read.

    Parameters
    ----------
    connection, table_functions
        As for `tables_read`.
    script : sequence of str
        Definitions and queries, a statement each.

    Examples
    --------
    >>> qualifiers(duckdb.connect(), ["SELECT v.stop FROM wh.main.visits AS v"], ())
    {'wh'}
    """
    found: set[str] = set()
    reader = _Reader(connection, frozenset(table_functions))
    for text in script:
        for statement in split(connection, text):
            if statement.kind is Kind.SETTING:
                found |= mentions_of(text).names  # USE makes it the one that bare names mean
            elif statement.body_text:
                before = "SELECT (" if statement.is_expression else ""
                reader.read(f"{before}{statement.body_text}{')' if before else ''}", frozenset())
    return found | reader.qualifiers


class _Reader:
    def __init__(
        self, connection: duckdb.DuckDBPyConnection, table_functions: frozenset[str]
    ) -> None:
        self._connection = connection
        self._table_functions = table_functions
        self.found: set[str] = set()
        self.qualifiers: set[str] = set()

    def read(self, text: str, hidden: frozenset[str]) -> None:
        """Note the tables of a query; `hidden` are the names it cannot mean a table by."""
        try:
            tree = parse_with_pivots(self._connection, text)
        except NotParsed:  # rather too many than too few
            names = mentions_of(text, self._table_functions).names - hidden
            self.found |= names
            self.qualifiers |= names
            return
        self._walk(tree.root, hidden)

    def _walk(self, item: Any, hidden: frozenset[str]) -> None:
        if isinstance(item, list):
            for part in item:
                self._walk(part, hidden)
            return
        if not isinstance(item, dict):
            return
        for entry in (item.get("cte_map") or {}).get("map") or ():
            self._walk(entry.get("value"), hidden)
            hidden = hidden | {str(entry.get("key", "")).casefold()}
        if item.get("type") == "RECURSIVE_CTE_NODE" or item.get("cte_name"):
            name = str(item.get("cte_name") or item.get("ctename") or "").casefold()
            hidden = hidden | {name}
        if item.get("type") == "BASE_TABLE":
            self._note_table(item, hidden)
        elif item.get("type") == "TABLE_FUNCTION":
            self._note_call(item["function"], hidden)
        for key, part in item.items():
            if key != "cte_map":
                self._walk(part, hidden)

    def _note_table(self, node: Node, hidden: frozenset[str]) -> None:
        path = [str(part).casefold() for part in node["qualified_name"]["path"]]
        if len(path) > 1:
            self.qualifiers.add(path[0])
        if len(path) == 1 and path[0] not in hidden:
            self.found.add(path[0])
        elif len(path) > 1 and all(part in _OWN_SCHEMAS for part in path[:-1]):
            self.found.add(path[-1])

    def _note_call(self, call: Node, hidden: frozenset[str]) -> None:
        name = function_name(call) or ""
        if name not in self._table_functions and name not in _TEXT_TAKERS:
            return
        for argument in call.get("arguments") or ():
            literal = argument["expression"].get("literal") or {}
            if argument.get("name", "") not in ("", "tbl") or literal.get("kind") != "STRING":
                continue
            text = str(literal["text"]).strip()
            if text.startswith("(") or name == "query":
                self.read(text if name == "query" else f"FROM {text}", hidden)
            elif text.casefold() not in hidden:
                self.found.add(text.strip('"').casefold())
                self.qualifiers.add(text.partition(".")[0].strip('"').casefold())
            return
