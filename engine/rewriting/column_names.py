"""Keeps the names of unnamed columns.

DuckDB names an unnamed column by the text of its expression, so an expression that is about to be
rewritten gets its old name first.
"""

from midspread.engine.parsing import NotParsed, expression_text, nodes, parse, quoted
from midspread.engine.rewriting.edits import Edit
from midspread.engine.rewriting.query import Query


def column_names(query: Query) -> list[Edit]:
    """Name every unnamed item of a SELECT list that calls one of our functions.

    ``SELECT trimmed_mean(x) FROM t`` becomes
    ``SELECT trimmed_mean(x) AS "trimmed_mean(x)" FROM t``.
    """
    found = {}
    for call in query.calls:
        index = query.token_at(call.start)
        for select, clause in query.clauses.enclosing(index) if index >= 0 else ():
            if clause != "SELECT":
                continue
            for first, stop in query.clauses.items(select):
                if first <= index < stop:
                    found[first, stop] = select.ranges.get("WINDOW")
    edits = []
    for (first, stop), windows in found.items():
        name = _name_of(query, query.between(first, stop), windows)
        if name is not None:
            end = query.tokens[stop - 1].stop
            edits.append(Edit(end, end, f" AS {quoted(name)}"))
    return edits


def _name_of(query: Query, item: str, windows: tuple[int, int] | None) -> str | None:
    """The name DuckDB gives an item; None when it has one, or stands for several columns."""
    select = f"SELECT {item}"
    if windows:
        select += f" WINDOW {query.between(*windows)}"
    try:
        (node,) = parse(query.connection, select).root["select_list"]
    except (NotParsed, ValueError):
        return None
    if node.get("alias") or any(part.get("class") == "STAR" for part in nodes(node)):
        return None
    return expression_text(query.connection, node)
