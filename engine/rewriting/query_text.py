"""Queries that are handed over as text: ``robust_summary('(SELECT …)', …)``.

Our table functions and the engine's ``query`` take a query as a string; it is rewritten in turn.
"""

from collections.abc import Callable

from midspread.engine.parsing import Node, NotParsed, function_name, literal, nodes
from midspread.engine.rewriting.edits import Edit
from midspread.engine.rewriting.query import Query
from midspread.udfs import Function


def query_text(
    query: Query, rewritten: Callable[[str], str], rewritten_expression: Callable[[str], str]
) -> list[Edit]:
    """Rewrite queries within strings.

    ``FROM query('SELECT mad_scale(DISTINCT x) AS m FROM t')`` becomes
    ``FROM query('SELECT _mad_scale(list_distinct(_values(x))) AS m FROM t')``. So is the
    expression of ``bootstrap_expression('t', 'mad_scale(x) FILTER (WHERE ok)')``.
    """
    edits = []
    for node in nodes(query.tree.root):
        if node.get("type") != "TABLE_FUNCTION":
            continue
        name = function_name(node["function"]) or ""
        function = query.functions.get(name)
        if name != "query" and (function is None or function.kind != "table"):
            continue
        for place, argument in enumerate(node["function"]["arguments"]):
            given = argument["expression"]
            written = given.get("literal") if given.get("class") == "CONSTANT" else None
            if function is not None and _is_expression(function, place, argument["name"]):
                edits += _expression(query, given, rewritten_expression)
                continue
            is_table = argument["name"] == "tbl" or (place == 0 and not argument["name"])
            if not is_table or not isinstance(written, dict):
                continue
            span = query.tree.span(given)
            text = str(written.get("text"))
            if span is None or (name != "query" and not text.lstrip().startswith("(")):
                continue
            before = "" if name == "query" else "FROM "
            try:
                becomes = rewritten(before + text).removeprefix(before)
            except NotParsed:
                continue
            if becomes != text:
                edits.append(Edit(*span, literal(becomes)))
    return edits


def _is_expression(function: Function, place: int, name: str) -> bool:
    return name == "expression" or (
        not name and function.columns[place : place + 1] == ("expression",)
    )


def _expression(query: Query, given: Node, rewritten: Callable[[str], str]) -> list[Edit]:
    written = given.get("literal") if given.get("class") == "CONSTANT" else None
    span = query.tree.span(given)
    if not isinstance(written, dict) or span is None:
        return []
    text = str(written.get("text"))
    try:
        becomes = rewritten("SELECT " + text).removeprefix("SELECT ")
    except NotParsed:
        return []
    return [Edit(*span, literal(becomes))] if becomes != text else []
