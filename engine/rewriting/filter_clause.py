"""FILTER on our functions.

Our functions are macros, which take no FILTER; a condition on the column does the same, since NULL
is skipped.
"""

from midspread.engine.errors import MidspreadError
from midspread.engine.rewriting.edits import Edit
from midspread.engine.rewriting.misfit import misfit
from midspread.engine.rewriting.query import Call, Query


def filter_clause(query: Query) -> list[Edit]:
    """Move the condition of FILTER into the columns.

    ``trimmed_mean(x, 0.1) FILTER (WHERE ok)`` becomes
    ``trimmed_mean(CASE WHEN (ok) THEN (x) END, 0.1)``.
    """
    edits: list[Edit] = []
    for call in query.calls:
        if call.filter is not None:
            edits += _moved(query, call)
    return edits


def condition(query: Query, call: Call) -> tuple[int, int]:
    """Where the condition of a plain call's FILTER stands in the text."""
    opening = call.closing + 2
    first = opening + (2 if query.tokens[opening + 1].says("WHERE") else 1)
    last = query.clauses.closing(opening) - 1
    return query.tokens[first].start, query.tokens[last].stop


def _moved(query: Query, call: Call) -> list[Edit]:
    name = call.function.name
    wrong = misfit(call) if call.is_plain else None
    if wrong is not None:
        raise MidspreadError(wrong)
    columns = call.columns() if call.is_plain else None
    if columns is None:
        raise MidspreadError(
            f"{name}: FILTER needs the call written with its columns in brackets; "
            f"write {name}({', '.join(call.function.columns)}) FILTER (WHERE ...)."
        )
    start, stop = condition(query, call)
    end = query.tokens[query.clauses.closing(call.closing + 2)].stop
    edits = [Edit(query.tokens[call.closing].stop, end, "")]
    for column in columns:
        before = f"CASE WHEN ({query.text[start:stop]}) THEN ("
        edits.append(Edit(column.start, column.start, before))
        edits.append(Edit(column.stop, column.stop, ") END"))
    return edits
