"""Whether rows that are read twice are the same both times.

A LIMIT without an order, a sample, a window over ties or a sum of floating-point numbers may come
out differently; such rows must be kept from the first reading.
"""

from collections.abc import Mapping
from typing import Final

from midspread.engine.parsing import Node, NotParsed, function_name, nodes
from midspread.engine.pivoting import parse_with_pivots
from midspread.engine.rewriting.catalog import Catalog
from midspread.engine.rewriting.query import Query
from midspread.engine.statements import view_body

_SAME_IN_ANY_ORDER: Final = frozenset(
    {
        "bit_and",
        "bit_or",
        "bit_xor",
        "bool_and",
        "bool_or",
        "count",
        "count_if",
        "count_star",
        "mad",
        "max",
        "median",
        "min",
        "quantile",
        "quantile_cont",
        "quantile_disc",
    }
)
_STEADY_TABLES: Final = frozenset(
    {
        "generate_series",
        "glob",
        "json_each",
        "json_tree",
        "parquet_scan",
        "range",
        "read_csv",
        "read_csv_auto",
        "read_json",
        "read_json_auto",
        "read_ndjson",
        "read_ndjson_auto",
        "read_parquet",
        "unnest",
    }
)
PLAIN_JOINS: Final = ("REGULAR", "CROSS", "NATURAL")


class Repeatable:
    """Judges parts of one query.

    Parameters
    ----------
    query : Query
        Its WITH definitions are looked up by name.
    catalog : Catalog
        Its views likewise.
    """

    def __init__(self, query: Query, catalog: Catalog) -> None:
        self._query = query
        self._catalog = catalog
        self._definitions = _definitions(query.tree.root)
        self._known: dict[str, bool] = {}

    def holds(self, root: Node) -> bool:
        """Whether a table reference, query or expression gives the same when evaluated twice."""
        return all(self._is_steady(node) for node in nodes(root))

    def _is_steady(self, node: Node) -> bool:
        kind, name = node.get("type"), function_name(node)
        if kind in ("LIMIT_MODIFIER", "LIMIT_PERCENT_MODIFIER"):
            return False
        if node.get("class") == "WINDOW" or node.get("sample") or node.get("distinct_on_targets"):
            return False
        if kind == "JOIN":
            return node.get("ref_type") in PLAIN_JOINS
        if kind == "PIVOT":
            return False
        if kind == "BASE_TABLE":
            return self._is_steady_name(str(node["table_name"]))
        if kind == "TABLE_FUNCTION":
            called = function_name(node["function"])
            return called in _STEADY_TABLES or called in self._catalog.own_names
        if name is None or name in _STEADY_TABLES:
            return True
        if name in self._catalog.own_names or name in _SAME_IN_ANY_ORDER:
            return True
        return self._catalog.is_steady(name) and not self._catalog.is_aggregate(name)

    def _is_steady_name(self, name: str) -> bool:
        """Whether a table, view or WITH definition of this name gives the same rows twice."""
        key = name.lower()
        if key not in self._known:
            self._known[key] = True  # what rests on itself is judged by the rest of it
            self._known[key] = all(self.holds(root) for root in self._roots(key))
        return self._known[key]

    def _roots(self, name: str) -> list[Node]:
        found = list(self._definitions.get(name, []))
        for sql in self._catalog.views(name):
            try:
                found.append(parse_with_pivots(self._query.connection, view_body(sql)).root)
            except NotParsed:
                return [{"type": "LIMIT_MODIFIER"}]
        return found


def _definitions(root: Node) -> Mapping[str, list[Node]]:
    """The queries that WITH defines anywhere in a query, by name."""
    found: dict[str, list[Node]] = {}
    for node in nodes(root):
        entries = node.get("cte_map")
        for entry in entries.get("map", []) if isinstance(entries, dict) else []:
            found.setdefault(str(entry["key"]).lower(), []).append(entry["value"])
    return found
