"""DISTINCT in our functions.

Macros take no DISTINCT; the function behind the macro is given a list of distinct values instead.
"""

from midspread.engine.errors import MidspreadError
from midspread.engine.rewriting.edits import Edit
from midspread.engine.rewriting.misfit import misfit
from midspread.engine.rewriting.query import Call, Query


def distinct(query: Query) -> list[Edit]:
    """Hand over each value once; calls under OVER are left to `window_call`.

    ``trimmed_mean(DISTINCT x, 0.1)`` becomes
    ``_trimmed_mean(list_distinct(_values(x)), _number(0.1))``.
    """
    edits = []
    for call in query.calls:
        if call.is_distinct:
            _check(call)
            if not call.is_window:
                edits.append(Edit(call.start, call.stop, call.underlying(distinct=True)))
    return edits


def _check(call: Call) -> None:
    name = call.function.name
    if len(call.function.columns) > 1:
        raise MidspreadError(
            f"{name}: DISTINCT is for functions of one column, and {name} takes "
            f"{' and '.join(call.function.columns)}; select the distinct rows first: "
            f"FROM (SELECT DISTINCT ... FROM ...)."
        )
    wrong = misfit(call) if call.is_plain else None
    if wrong is not None:
        raise MidspreadError(wrong)
    if not call.is_plain or call.columns() is None or call.parameters() is None:
        raise MidspreadError(
            f"{name}: DISTINCT needs the plain form; write {name}(DISTINCT x"
            f"{''.join(f', {p.name} := ...' for p in call.function.parameters)})."
        )
