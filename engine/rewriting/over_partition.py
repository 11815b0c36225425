"""OVER (PARTITION BY …) over whole partitions.

A macro under OVER hands the whole partition to the function once for every row of it. Here each
partition is computed once, by a grouped query that the rows look their value up in.
"""

from dataclasses import dataclass, field

from midspread.engine.parsing import Node, NotParsed, expression_text, nodes, parse, quoted
from midspread.engine.rewriting.aliases import Aliases
from midspread.engine.rewriting.catalog import Catalog
from midspread.engine.rewriting.clauses import Clauses
from midspread.engine.rewriting.edits import Edit, apply, without_overlaps
from midspread.engine.rewriting.query import Call, Query, same
from midspread.engine.rewriting.repeatable import Repeatable
from midspread.engine.rewriting.sources import Source, sources

_MARK = "_midspread_"


@dataclass
class _Partition:
    """Calls of one SELECT over the same partitions, and their texts without OVER."""

    keys: list[str]
    calls: list[Call] = field(default_factory=list)
    texts: list[str] = field(default_factory=list)


def over_partition(query: Query, catalog: Catalog) -> list[Edit]:
    """Compute a function once a partition, for one SELECT of the query at a time.

    ``SELECT x, mad_scale(x) OVER (PARTITION BY g) FROM t`` becomes
    ``WITH _midspread_1 AS MATERIALIZED (SELECT g AS _midspread_1_key_1, mad_scale(x) AS
    _midspread_1_value_1 FROM t GROUP BY 1) SELECT x, _midspread_1_value_1 FROM t, _midspread_1
    WHERE _midspread_1_key_1 IS NOT DISTINCT FROM (g)``.

    What this does not hold for (an order or a frame, parameters that differ by row, grouped
    queries, correlated ones) is left to `window_call`, which gives the same, only later.
    """
    repeatable = Repeatable(query, catalog)
    by_select: dict[int, list[Call]] = {}
    for call in query.calls:
        if _covers_whole_partitions(call) and _has_fixed_parameters(call):
            by_select.setdefault(call.select, []).append(call)
    for index, calls in by_select.items():
        if index < 0:
            continue
        select = query.selects[index]
        if select.in_expression or select.in_recursion or not _is_plain(select.node, catalog):
            continue
        clauses = _clauses_of(query, calls)
        if clauses is None or not _reads_back(query, select.node, clauses):
            continue
        aliases = Aliases(query, select.node, clauses)
        calls = aliases.usable(call for call in calls if _is_steady(call, repeatable))
        partitions = _partitions(query, calls, aliases)
        read = sources(query, select.node["from_table"])
        if not calls or read is None or not _may_read_twice(select.node, read, repeatable):
            continue
        return _joined_back(query, partitions, clauses, select.node, read, repeatable)
    return []


def _covers_whole_partitions(call: Call) -> bool:
    node = call.node
    if not call.is_window or not call.is_plain or call.filter is not None:
        return False
    if node.get("ignore_nulls") or node.get("exclude_clause") != "NO_OTHER" or node.get("orders"):
        return False
    if node.get("start") != "UNBOUNDED_PRECEDING" or call.is_ordered_inside:
        return False
    return node.get("end") in ("CURRENT_ROW_RANGE", "UNBOUNDED_FOLLOWING")


def _has_fixed_parameters(call: Call) -> bool:
    parameters = call.parameters()
    if parameters is None or call.columns() is None:
        return False
    return all(
        argument is None
        or not any(
            part.get("class") in ("COLUMN_REF", "SUBQUERY", "STAR", "WINDOW")
            for part in nodes(argument.node)
        )
        for _, argument in parameters
    )


def _is_plain(select: Node, catalog: Catalog) -> bool:
    """Whether a SELECT has one row for every row that it reads."""
    if select["group_expressions"] or select["having"] or select["sample"]:
        return False
    if select["aggregate_handling"] != "STANDARD_HANDLING" or select["group_sets"]:
        return False
    if select["from_table"]["type"] == "EMPTY":
        return False
    waiting: list[object] = [select["select_list"], select["qualify"], select["modifiers"]]
    while waiting:
        item = waiting.pop()
        if isinstance(item, list):
            waiting.extend(item)
        elif isinstance(item, dict) and item.get("class") != "SUBQUERY":
            name = str(item.get("function_name") or "").lower()
            if item.get("class") == "FUNCTION" and catalog.is_aggregate(name):
                return False
            waiting.extend(item.values())
    return True


def _is_steady(call: Call, repeatable: Repeatable) -> bool:
    given = [argument.node for argument in call.arguments]
    return all(
        repeatable.holds(node) and not _has(node, "STAR")
        for node in [*given, *call.node["partitions"]]
    )


def _has(root: Node, kind: str) -> bool:
    return any(node.get("class") == kind for node in nodes(root))


def _may_read_twice(select: Node, read: list[Source], repeatable: Repeatable) -> bool:
    """Whether, its unsteady tables kept, a SELECT reads the same rows twice."""
    where = select["where_clause"]
    if where is not None and not repeatable.holds(where):
        return False
    kept = {id(source.node) for source in read}
    waiting: list[Node] = [select["from_table"]]
    while waiting:
        node = waiting.pop()
        if id(node) in kept:
            continue
        if node.get("type") != "JOIN" or node.get("ref_type") not in (
            "REGULAR",
            "CROSS",
            "NATURAL",
        ):
            return False
        condition = node.get("condition")
        if node.get("sample") or (condition is not None and not repeatable.holds(condition)):
            return False
        waiting += [node["left"], node["right"]]
    return True


def _clauses_of(query: Query, calls: list[Call]) -> Clauses | None:
    """The clauses around calls of one SELECT."""
    found = next(query.clauses.enclosing(query.token_at(calls[0].start)), None)
    return found[0] if found and "FROM" in found[0].ranges else None


def _reads_back(query: Query, select: Node, clauses: Clauses) -> bool:
    """Whether FROM and WHERE, taken from the text, mean what they mean in the tree."""
    try:
        root = parse(query.connection, _rows(query, clauses)).root
    except NotParsed:
        return False
    where, parsed = select["where_clause"], root.get("where_clause")
    if where is None or parsed is None:
        if where is not parsed:
            return False
    elif not same(where, parsed):
        return False
    return same(select["from_table"], root["from_table"])


def _rows(query: Query, clauses: Clauses) -> str:
    return "SELECT 1 " + _from_and_where(query, clauses)


def _from_and_where(query: Query, clauses: Clauses) -> str:
    text = f"FROM {query.between(*clauses.ranges['FROM'])}"
    if "WHERE" in clauses.ranges:
        text += f" WHERE {query.between(*clauses.ranges['WHERE'])}"
    return text


def _joined_back(
    query: Query,
    partitions: list[_Partition],
    clauses: Clauses,
    select: Node,
    read: list[Source],
    repeatable: Repeatable,
) -> list[Edit]:
    number = _unused_number(query.text)
    definitions: list[str] = []
    edits: list[Edit] = []
    for source in read:
        if not repeatable.holds(source.node):
            name = f"{_MARK}{number}"
            number += 1
            definitions.append(f"{name} AS MATERIALIZED ({source.query})")
            shown = f"{name} AS {quoted(source.alias)}" if source.alias else name
            edits.append(Edit(source.start, source.stop, shown))
    stars = _stars_to_narrow(query, clauses, select)
    joined, conditions, added = [], [], []
    for partition in partitions:
        name = f"{_MARK}{number}"
        number += 1
        definitions.append(_grouped(query, clauses, partition, name, edits))
        condition = " AND ".join(
            f"{name}_key_{i} IS NOT DISTINCT FROM ({key})"
            for i, key in enumerate(partition.keys, 1)
        )
        for i, call in enumerate(partition.calls, 1):
            value = f"{name}_value_{i}"
            if stars is None:
                where = f" WHERE {condition}" if condition else ""
                value = f"(SELECT {value} FROM {name}{where})"
            edits.append(Edit(call.start, call.stop, value))
        joined.append(name)
        conditions += [condition] if condition else []
        added += [f"{name}_key_{i}" for i in range(1, len(partition.keys) + 1)]
        added += [f"{name}_value_{i}" for i in range(1, len(partition.calls) + 1)]
    if stars is not None:
        edits += _joined(query, clauses, joined, conditions)
        edits += [Edit(place, place, f" EXCLUDE ({', '.join(added)})") for place in stars]
    edits += _with_definitions(query, clauses, definitions)
    if select["qualify"] is not None:
        edits += _kept_qualify(query, clauses)
    return edits


def _stars_to_narrow(query: Query, clauses: Clauses, select: Node) -> list[int] | None:
    """Where columns of a joined table must be kept out of a ``*``.

    None when they could not be: then a value is looked up by a subquery, which joins nothing but
    whose result the rest of the SELECT list cannot use by its alias.
    """
    if "SELECT" not in clauses.ranges:
        return None
    plain = 0
    for item in select["select_list"]:
        if item.get("class") == "STAR" and not (item["relation_name"] or item["columns"]):
            plain += 1
    for node in nodes([select["select_list"], select["modifiers"], select["qualify"]]):
        if node.get("class") == "STAR" and not node["relation_name"]:
            plain -= 1
    places = [
        query.tokens[first].stop
        for first, stop in query.clauses.items(clauses)
        if stop == first + 1 and query.tokens[first].text == "*"
    ]
    stars = [item for item in select["select_list"] if item.get("class") == "STAR"]
    bare = [item for item in stars if not item["relation_name"]]
    return places if plain == 0 and len(places) == len(bare) else None


def _joined(query: Query, clauses: Clauses, names: list[str], conditions: list[str]) -> list[Edit]:
    end_of_from = query.tokens[clauses.ranges["FROM"][1] - 1].stop
    edits = [Edit(end_of_from, end_of_from, f", {', '.join(names)}")]
    if not conditions:
        return edits
    condition = " AND ".join(conditions)
    if "WHERE" in clauses.ranges:
        first, stop = clauses.ranges["WHERE"]
        start, end = query.tokens[first].start, query.tokens[stop - 1].stop
        return [*edits, Edit(start, start, "("), Edit(end, end, f") AND {condition}")]
    end = query.tokens[max(clauses.ranges["FROM"][1], clauses.ranges["SELECT"][1]) - 1].stop
    return [*edits, Edit(end, end, f" WHERE {condition}")]


def _partitions(query: Query, calls: list[Call], aliases: Aliases) -> list[_Partition]:
    found: list[_Partition] = []
    for call in calls:
        keys = [
            expression_text(query.connection, aliases.resolved(node))
            for node in call.node["partitions"]
        ]
        for partition in found:
            if partition.keys == keys:
                break
        else:
            partition = _Partition(keys)
            found.append(partition)
        partition.calls.append(call)
        partition.texts.append(_grouped_call(query, call, aliases))
    return found


def _grouped_call(query: Query, call: Call, aliases: Aliases) -> str:
    """A call without its OVER."""
    start = query.tokens[call.opening].stop
    text = query.text[call.start : start] + ("DISTINCT " if call.is_distinct else "")
    given = []
    for argument in call.arguments:
        resolved = aliases.resolved(argument.node)
        is_same = resolved == argument.node
        value = argument.text if is_same else expression_text(query.connection, resolved)
        given.append(f"{argument.name} := {value}" if argument.name else value)
    return f"{text}{', '.join(given)})"


def _grouped(
    query: Query, clauses: Clauses, partition: _Partition, name: str, edits: list[Edit]
) -> str:
    """The definition of the query with one row a partition."""
    items = [f"{key} AS {name}_key_{i}" for i, key in enumerate(partition.keys, 1)]
    items += [f"{text} AS {name}_value_{i}" for i, text in enumerate(partition.texts, 1)]
    start = query.tokens[clauses.ranges["FROM"][0]].start
    stop = query.tokens[clauses.ranges["FROM"][1] - 1].stop
    moved = [
        Edit(edit.start - start, edit.stop - start, edit.text)
        for edit in edits
        if start <= edit.start and edit.stop <= stop
    ]
    rows = f"FROM {apply(query.text[start:stop], without_overlaps(moved))}"
    if "WHERE" in clauses.ranges:
        rows += f" WHERE {query.between(*clauses.ranges['WHERE'])}"
    positions = ", ".join(str(i) for i in range(1, len(partition.keys) + 1))
    grouping = f" GROUP BY {positions}" if positions else ""
    return f"{name} AS MATERIALIZED (SELECT {', '.join(items)} {rows}{grouping})"


def _with_definitions(query: Query, clauses: Clauses, definitions: list[str]) -> list[Edit]:
    """Put the definitions behind those of the query's own WITH, or in front of it."""
    text = ", ".join(definitions)
    if clauses.with_end is not None:
        place = query.tokens[clauses.with_end - 1].stop
        return [Edit(place, place, f", {text}")]
    place = query.tokens[clauses.query_first].start
    return [Edit(place, place, f"WITH {text} ")]


def _kept_qualify(query: Query, clauses: Clauses) -> list[Edit]:
    """DuckDB wants a window function where QUALIFY is; a row number is always above 0."""
    first, stop = clauses.ranges["QUALIFY"]
    return [
        Edit(query.tokens[first].start, query.tokens[first].start, "("),
        Edit(
            query.tokens[stop - 1].stop,
            query.tokens[stop - 1].stop,
            ") AND row_number() OVER () > 0",
        ),
    ]


def _unused_number(text: str) -> int:
    number = 1
    while f"{_MARK}{number}" in text:
        number += 1
    return number
