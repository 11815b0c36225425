"""The tables that a FROM clause is joined from, and where they stand in the text."""

from dataclasses import dataclass

from midspread.engine.parsing import Node, unquoted
from midspread.engine.rewriting.query import Query


@dataclass(frozen=True)
class Source:
    """One table, subquery or table function in FROM, without its alias.

    Attributes
    ----------
    node : dict
        Its node in the tree.
    start, stop : int
        Where it stands.
    query : str
        A query that gives its rows.
    alias : str
        The name it has when the text gives it none; empty when it has one.
    """

    node: Node
    start: int
    stop: int
    query: str
    alias: str


def sources(query: Query, from_table: Node) -> list[Source] | None:
    """What a FROM clause joins, None when some of it is of another kind.

    Subqueries that say LATERAL, samples and PIVOT are of another kind.
    """
    found: list[Source] = []
    waiting = [from_table]
    while waiting:
        node = waiting.pop()
        if node["type"] == "JOIN":
            waiting += [node["left"], node["right"]]
            continue
        source = _source(query, node)
        if source is None:
            return None
        found.append(source)
    return found


def _source(query: Query, node: Node) -> Source | None:
    span = query.tree.span(node)
    index = query.token_at(span[0]) if span else -1
    if index < 0 or node.get("sample") or node.get("at_clause"):
        return None
    if query.tokens[index - 1].says("LATERAL"):
        return None
    kind = node["type"]
    last = index
    if kind in ("BASE_TABLE", "TABLE_FUNCTION"):
        while last + 2 < len(query.tokens) and query.tokens[last + 1].text == ".":
            last += 2
    name = unquoted(query.tokens[last].text)
    if kind == "TABLE_FUNCTION":
        last += 1
        if last >= len(query.tokens) or node.get("with_ordinality") != "WITHOUT_ORDINALITY":
            return None
    if kind in ("SUBQUERY", "TABLE_FUNCTION"):
        if query.tokens[last].text != "(":
            return None
        last = query.clauses.closing(last)
    elif kind != "BASE_TABLE":
        return None
    start, stop = query.tokens[index].start, query.tokens[last].stop
    text = query.text[start:stop]
    if kind == "SUBQUERY":
        return Source(node, start, stop, text[1:-1], "")
    if kind == "BASE_TABLE":
        name = str(node["table_name"])
    return Source(node, start, stop, f"FROM {text}", "" if node.get("alias") else name)
