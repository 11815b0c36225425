"""FILTER on our functions.

Our functions are macros, which take no FILTER; a condition on the column does the same, since NULL
is skipped.
"""

from midspread.engine.errors import MidspreadError
from midspread.engine.parsing import function_name, nodes
from midspread.engine.rewriting.catalog import Catalog
from midspread.engine.rewriting.edits import Edit
from midspread.engine.rewriting.misfit import misfit
from midspread.engine.rewriting.query import Call, Query


def filter_clause(query: Query, catalog: Catalog) -> list[Edit]:
    """Move the condition of FILTER into the columns.

    ``trimmed_mean(x, 0.1) FILTER (WHERE ok)`` becomes
    ``trimmed_mean(CASE WHEN (ok) THEN (x) END, 0.1)``. A condition that draws at random must be
    evaluated once a row, and is handed to the list that the function behind the macro is given;
    under OVER it is left to `window_call`.
    """
    edits: list[Edit] = []
    for call in query.calls:
        if call.filter is None:
            continue
        _check(call)
        if all(catalog.is_steady(function_name(node) or "") for node in nodes(call.filter)):
            edits += _moved(query, call)
        elif not call.is_window:
            edits.append(_handed_over(query, call))
    return edits


def condition(query: Query, call: Call) -> tuple[int, int]:
    """Where the condition of a plain call's FILTER stands in the text."""
    opening = call.closing + 2
    first = opening + (2 if query.tokens[opening + 1].says("WHERE") else 1)
    last = query.clauses.closing(opening) - 1
    return query.tokens[first].start, query.tokens[last].stop


def _check(call: Call) -> None:
    name = call.function.name
    wrong = misfit(call) if call.is_plain else None
    if wrong is not None:
        raise MidspreadError(wrong)
    if not call.is_plain or call.columns() is None or call.parameters() is None:
        raise MidspreadError(
            f"{name}: FILTER needs the call written with its columns in brackets; "
            f"write {name}({', '.join(call.function.columns)}) FILTER (WHERE ...)."
        )


def _moved(query: Query, call: Call) -> list[Edit]:
    start, stop = condition(query, call)
    end = query.tokens[query.clauses.closing(call.closing + 2)].stop
    edits = [Edit(query.tokens[call.closing].stop, end, "")]
    for column in call.columns() or ():
        before = f"CASE WHEN ({query.text[start:stop]}) THEN ("
        edits.append(Edit(column.start, column.start, before))
        edits.append(Edit(column.stop, column.stop, ") END"))
    return edits


def _handed_over(query: Query, call: Call) -> Edit:
    if len(call.function.columns) > 1:
        raise MidspreadError(
            f"{call.function.name}: the condition of its FILTER draws at random, which would "
            f"differ between its columns; filter the rows first: "
            f"FROM (SELECT ... FROM ... WHERE ...)."
        )
    start, stop = condition(query, call)
    text = call.underlying(condition=f"({query.text[start:stop]})", distinct=call.is_distinct)
    return Edit(call.start, call.stop, text)
