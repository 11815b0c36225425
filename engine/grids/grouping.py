"""Which columns of a query's result tell its rows apart: those it groups by."""

from typing import Any

import duckdb

from midspread.engine.parsing import Node, NotParsed, function_name, nodes, parse, without_places
from midspread.engine.rewriting.catalog import Catalog
from midspread.udfs import functions


def grouped_by(connection: duckdb.DuckDBPyConnection, query: str) -> tuple[str, ...]:
    """The columns of the result that the outermost SELECT groups by.

    ``GROUP BY ALL``, positions, aliases and the `by` of our table functions are understood. Empty
    when the query groups by nothing, or by something that is no column of its result.

    Examples
    --------
    >>> grouped_by(duckdb.connect(), "SELECT route AS r, count(*) FROM t GROUP BY route")
    ('r',)
    """
    try:
        root = parse(connection, query).root
    except NotParsed:
        return ()
    select = _outermost(root)
    if select is None:
        return ()
    names = [_name(item) for item in select["select_list"]]
    if select.get("aggregate_handling") == "FORCE_AGGREGATES":
        catalog = Catalog(connection, frozenset(functions()))
        return tuple(
            name
            for name, item in zip(names, select["select_list"], strict=True)
            if name and not _has_aggregate(item, catalog)
        )
    if select["group_expressions"]:
        if len(select.get("group_sets") or []) > 1:
            return ()
        found = [
            _output(group, select["select_list"], names) for group in select["group_expressions"]
        ]
        return tuple(name for name in found if name) if all(found) else ()
    return _by_of_table_function(select)


def _outermost(root: Any) -> Node | None:
    node = root
    while isinstance(node, dict):
        if node.get("type") == "SELECT_NODE":
            return node
        node = node.get("node") or node.get("child") or node.get("query")
    if isinstance(node, list) and node:
        return _outermost(node[0])
    return None


def _name(item: Node) -> str:
    """What a column of the result is called; empty where the engine makes the name up."""
    if item.get("alias"):
        return str(item["alias"])
    if item.get("class") == "COLUMN_REF":
        return str(item["column_names"][-1])
    return ""


def _output(group: Node, items: list[Node], names: list[str]) -> str:
    """The name under which a grouped expression appears in the result; empty when it does not."""
    if group.get("class") == "CONSTANT":
        written = str((group.get("literal") or {}).get("text", ""))
        place = int(written) if written.isdigit() else 0
        return names[place - 1] if 0 < place <= len(names) else ""
    if group.get("class") == "COLUMN_REF":
        wanted = str(group["column_names"][-1]).casefold()
        for item, name in zip(items, names, strict=True):
            is_same = item.get("class") == "COLUMN_REF" and (
                str(item["column_names"][-1]).casefold() == wanted
            )
            if is_same or name.casefold() == wanted:
                return name
    bare = {**without_places(group), "alias": ""}
    for item, name in zip(items, names, strict=True):
        if {**without_places(item), "alias": ""} == bare:
            return name
    return ""


def _has_aggregate(item: Node, catalog: Catalog) -> bool:
    return any(catalog.is_aggregate(function_name(part) or "") for part in nodes(item))


def _by_of_table_function(select: Node) -> tuple[str, ...]:
    """The `by` of ``SELECT * FROM robust_summary(…, by := …)`` and the like."""
    source = select.get("from_table") or {}
    if source.get("type") != "TABLE_FUNCTION":
        return ()
    call = source["function"]
    function = functions().get(function_name(call) or "")
    if (
        function is None
        or function.kind != "table"
        or "by" not in [parameter.name for parameter in function.parameters]
    ):
        return ()
    for argument in call.get("arguments") or []:
        if argument.get("name", "").lower() == "by":
            return tuple(_texts(argument["expression"]))
    return ()


def _texts(node: Node) -> list[str]:
    found = [
        (part.get("query_location", 0), str(part["literal"]["text"]))
        for part in nodes(node)
        if (part.get("literal") or {}).get("kind") == "STRING"
    ]
    return [text for _, text in sorted(found)]
