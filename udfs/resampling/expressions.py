"""An SQL expression given as text: read by DuckDB's own parser before it is put into a query."""

import functools
import json
import threading
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final

from midspread.udfs.declaring import ParameterError, declared

if TYPE_CHECKING:
    import duckdb

_Node = Mapping[str, Any]

_KNOWN: Final = frozenset(
    {
        *("FUNCTION", "COLUMN_REF", "CONSTANT", "CAST", "COMPARISON", "CONJUNCTION", "OPERATOR"),
        *("CASE", "BETWEEN", "LAMBDA", "LAMBDA_REF", "COLLATE", "TYPE"),
    }
)
_WORDS: Final = {
    "SUBQUERY": "a subquery",
    "WINDOW": "a function with OVER",
    "STAR": "a *",
    "PARAMETER": "a parameter to be filled in",
    "POSITIONAL_REFERENCE": "a column by number",
    "DEFAULT": "DEFAULT",
}
_MANY_ROWS: Final = frozenset({"unnest", "generate_subscripts", "generate_series", "range"})
_RUNNING: Final = frozenset(
    {
        *("count", "count_star", "count_if", "countif", "sum", "sum_no_overflow", "fsum", "avg"),
        *("mean", "favg", "min", "max", "stddev", "stddev_samp", "stddev_pop", "variance"),
        *("var_samp", "var_pop", "sem", "corr", "covar_samp", "covar_pop", "regr_slope"),
        *("regr_intercept", "regr_r2", "regr_count", "regr_avgx", "regr_avgy", "regr_sxx"),
        *("regr_syy", "regr_sxy", "skewness", "kurtosis", "kurtosis_pop", "bool_and", "bool_or"),
    }
)
"""Aggregates that keep a few running figures and none of the values."""
_EXAMPLE: Final = "'sum(boardings) / sum(dwell_s)'"
_parsing = threading.Lock()


@dataclass(frozen=True)
class Expression:
    """An aggregate expression.

    Attributes
    ----------
    text : str
        In brackets, as it was written.
    columns : tuple of str
        The columns it reads.
    collects : bool
        Whether one of its aggregates may hold all of a group's values at once.
    """

    text: str
    columns: tuple[str, ...]
    collects: bool


def read_expression(function: str, given: object) -> Expression:
    """The one aggregate expression that a text holds.

    Raises
    ------
    ParameterError
        When it holds anything else: a statement, several expressions, a subquery, a function with
        OVER, a function whose result is chance, no aggregate at all.
    """
    if not isinstance(given, str) or not given.strip():
        raise _refused(function, "got NULL" if given is None else f"got {given!r}")
    # The line break ends a comment; without brackets, two expressions do not look like one record.
    text = f"({given.strip()}\n)"
    root = _only_expression(_tree(f"SELECT {text}"))
    if root is None or _only_expression(_tree(f"SELECT {given}")) is None:
        raise _refused(function, f"and this is not one: {given.strip()}")
    called: set[str] = set()
    columns: dict[str, str] = {}
    for node, bound in _nodes(root, frozenset()):
        kind = node.get("class")
        if isinstance(kind, str) and kind not in _KNOWN:
            raise _refused(function, f"and must not hold {_WORDS.get(kind, kind.lower())}")
        for name in _columns_of(node):
            if name.lower() not in bound:
                columns.setdefault(name.lower(), name)
        if kind == "FUNCTION":
            called.add(str(node["function_name"]).lower())
    known = _engine_functions()
    for name in sorted(called):
        if name in known.changing or name in _MANY_ROWS:
            raise _refused(function, f"and must not hold {name}()")
    own = declared()
    if all(name in known.of_rows or (name in own and own[name].kind == "row") for name in called):
        raise _refused(function, f"and there is no aggregate in {given.strip()}")
    collects = any(name not in known.of_rows and name not in _RUNNING for name in called)
    return Expression(text, tuple(columns.values()), collects)


def _refused(function: str, what: str) -> ParameterError:
    return ParameterError(
        f"{function}: expression must be one SQL aggregate expression, "
        f"{' '.join(what.split())}; write for example expression := {_EXAMPLE}."
    )


def _tree(sql: str) -> Any:
    with _parsing:
        rows = _parser().execute("SELECT json_serialize_sql(?::VARCHAR)", [sql]).fetchall()
    try:
        return json.loads(rows[0][0])
    except RecursionError:
        return {"error": True}


def _only_expression(tree: _Node) -> _Node | None:
    """The expression, when the query is a SELECT of one expression and nothing else."""
    if tree.get("error") or len(tree["statements"]) != 1:
        return None
    select = tree["statements"][0]["node"]
    if select.get("type") != "SELECT_NODE" or len(select["select_list"]) != 1:
        return None
    clauses = ("modifiers", "where_clause", "group_expressions", "group_sets", "having", "sample")
    if any(select.get(clause) for clause in (*clauses, "qualify")):
        return None
    if select["cte_map"]["map"] or select["from_table"]["type"] != "EMPTY":
        return None
    expression: _Node = select["select_list"][0]
    return None if expression.get("alias") else expression


def _nodes(node: Any, bound: frozenset[str]) -> Iterator[tuple[_Node, frozenset[str]]]:
    """Every node with the parameters of the lambdas around it."""
    if isinstance(node, list):
        for item in node:
            yield from _nodes(item, bound)
    elif isinstance(node, dict):
        if node.get("class") == "LAMBDA":
            names = [name for part, _ in _nodes(node["lhs"], bound) for name in _columns_of(part)]
            inner = bound | {name.lower() for name in names}
            yield from _nodes(node["expr"], inner)
            return
        yield node, bound
        for item in node.values():
            yield from _nodes(item, bound)


def _columns_of(node: _Node) -> list[str]:
    """The column a node refers to; of ``column.field`` and ``column.function()`` the column."""
    if node.get("class") == "COLUMN_REF":
        return [str(node["column_names"][0])]
    if node.get("class") == "FUNCTION" and node.get("schema"):
        named = str(node["schema"])
        return [] if named.lower() in ("main", "temp", "system", "pg_catalog") else [named]
    return []


@dataclass(frozen=True)
class _EngineFunctions:
    """The engine's functions.

    Attributes
    ----------
    of_rows : frozenset of str
        Those that are no aggregates.
    changing : frozenset of str
        Those that may answer otherwise the next time.
    """

    of_rows: frozenset[str]
    changing: frozenset[str]


@functools.cache
def _engine_functions() -> _EngineFunctions:
    with _parsing:
        rows = _parser().execute(
            "SELECT function_name, bool_and(function_type = 'scalar'), "
            "bool_and(coalesce(stability, 'CONSISTENT') <> 'CONSISTENT') "
            "FROM duckdb_functions() GROUP BY ALL"
        )
        found = rows.fetchall()
    return _EngineFunctions(
        frozenset(name for name, of_rows, _ in found if of_rows),
        frozenset(name for name, _, changing in found if changing) - {"error"},
    )


@functools.cache
def _parser() -> "duckdb.DuckDBPyConnection":
    """An empty database of our own, which only reads what it is given."""
    import duckdb

    return duckdb.connect(config={"threads": 1})
