"""FILTER on our functions.

Our functions are macros, which take no FILTER; a condition on the column does the same, since NULL
is skipped.
"""

from midspread.engine.errors import MidspreadError
from midspread.engine.rewriting.edits import Edit
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


def _moved(query: Query, call: Call) -> list[Edit]:
    name = call.function.name
    columns = call.columns() if call.is_plain else None
    if columns is None:
        raise MidspreadError(
            f"{name}: FILTER needs the call written with its columns in brackets; "
            f"write {name}({', '.join(call.function.columns)}) FILTER (WHERE ...)."
        )
    word = call.closing + 1
    opening = word + 1
    closing = query.clauses.closing(opening)
    first = opening + (2 if query.tokens[opening + 1].says("WHERE") else 1)
    condition = query.between(first, closing)
    edits = [Edit(query.tokens[call.closing].stop, query.tokens[closing].stop, "")]
    for column in columns:
        edits.append(Edit(column.start, column.start, f"CASE WHEN ({condition}) THEN ("))
        edits.append(Edit(column.stop, column.stop, ") END"))
    return edits
