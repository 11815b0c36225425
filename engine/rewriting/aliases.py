"""Names of SELECT items that later items use.

DuckDB lets ``SELECT x / 60 AS minutes, mad_scale(minutes) OVER (...)`` use the name at once, where
no column has it. A call that is moved elsewhere must say what the name stands for.
"""

from collections.abc import Iterable, Mapping
from typing import Any

import duckdb

from midspread.engine.parsing import Node, nodes
from midspread.engine.rewriting.clauses import Clauses
from midspread.engine.rewriting.query import Call, Query


class Aliases:
    """What the names of one SELECT's items stand for.

    Parameters
    ----------
    query : Query
        The query.
    select : dict
        The SELECT's node.
    clauses : Clauses
        Where its clauses stand.
    """

    def __init__(self, query: Query, select: Node, clauses: Clauses) -> None:
        self._query = query
        self._clauses = clauses
        self._items: dict[str, Node] = {}
        for item in select["select_list"]:
            if item.get("alias") and not _is_computed_later(item):
                self._items.setdefault(item["alias"].lower(), {**item, "alias": ""})

    def usable(self, calls: Iterable[Call]) -> list[Call]:
        """The calls whose names are all known to be columns or items."""
        found = list(calls)
        wanted = {name for call in found for name in self._names(call)} & self._items.keys()
        if not wanted:
            self._items = {}
            return found
        columns = self._columns()
        if columns is None:
            found = [call for call in found if not self._names(call) & wanted]
            self._items = {}
        else:
            self._items = {name: item for name, item in self._items.items() if name not in columns}
        return found

    def resolved(self, node: Any) -> Any:
        """An expression with items in place of their names."""
        if isinstance(node, dict):
            name = _single_name(node)
            if name in self._items:
                return self._items[name]
            return {key: self.resolved(value) for key, value in node.items()}
        if isinstance(node, list):
            return [self.resolved(item) for item in node]
        return node

    def _names(self, call: Call) -> set[str]:
        given = [argument.node for argument in call.arguments]
        found = {_single_name(node) for node in nodes([*given, *call.node["partitions"]])}
        return {name for name in found if name is not None}

    def _columns(self) -> set[str] | None:
        """The columns that FROM gives, None when they cannot be known."""
        rows = self._query.between(*self._clauses.ranges["FROM"])
        text = f"DESCRIBE {_definitions(self._query, self._clauses)} SELECT * FROM {rows}"
        try:
            found = self._query.connection.execute(text).fetchall()
        except duckdb.Error:
            return None
        return {str(row[0]).lower() for row in found}


def _definitions(query: Query, clauses: Clauses) -> str:
    around = query.clauses.definitions_around(clauses.first)
    text = ", ".join(query.between(*span) for span in around)
    return f"WITH RECURSIVE {text}" if text else ""


def _single_name(node: Mapping[str, Any]) -> str | None:
    names = node.get("column_names")
    if node.get("class") != "COLUMN_REF" or not isinstance(names, list) or len(names) != 1:
        return None
    return str(names[0]).lower()


def _is_computed_later(item: Node) -> bool:
    """Whether an item exists only once the rows have been grouped or ordered."""
    return any(node.get("class") in ("WINDOW", "SUBQUERY", "STAR") for node in nodes(item))
