"""Queries that are handed over as text: ``robust_summary('(SELECT …)', …)``.

Our table functions and the engine's ``query`` take a query as a string; it is rewritten in turn.
"""

from collections.abc import Callable

from midspread.engine.parsing import NotParsed, function_name, literal, nodes
from midspread.engine.rewriting.edits import Edit
from midspread.engine.rewriting.query import Query


def query_text(query: Query, rewritten: Callable[[str], str]) -> list[Edit]:
    """Rewrite queries within strings.

    ``FROM query('SELECT mad_scale(DISTINCT x) AS m FROM t')`` becomes
    ``FROM query('SELECT _mad_scale(list_distinct(_values(x))) AS m FROM t')``.
    """
    edits = []
    for node in nodes(query.tree.root):
        if node.get("type") != "TABLE_FUNCTION":
            continue
        name = function_name(node["function"]) or ""
        function = query.functions.get(name)
        if name != "query" and (function is None or function.kind != "table"):
            continue
        for argument in node["function"]["arguments"]:
            given = argument["expression"]
            written = given.get("literal") if given.get("class") == "CONSTANT" else None
            if argument["name"] not in ("", "tbl") or not isinstance(written, dict):
                continue
            span = query.tree.span(given)
            text = str(written.get("text"))
            if span is None or (name != "query" and not text.lstrip().startswith("(")):
                break
            before = "" if name == "query" else "FROM "
            try:
                becomes = rewritten(before + text).removeprefix(before)
            except NotParsed:
                break
            if becomes != text:
                edits.append(Edit(*span, literal(becomes)))
            break
    return edits
