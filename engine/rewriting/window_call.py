"""Our functions under OVER with an order, a frame, or whatever else `over_partition` leaves.

DuckDB takes a macro under OVER only when its body is a single aggregate; the function behind the
macro is given the window's list instead.
"""

from midspread.engine.errors import MidspreadError
from midspread.engine.rewriting.edits import Edit
from midspread.engine.rewriting.filter_clause import condition
from midspread.engine.rewriting.misfit import misfit
from midspread.engine.rewriting.query import Call, Query


def window_call(query: Query) -> list[Edit]:
    """Collect each row's window and hand it over.

    ``mad_scale(x) OVER (ORDER BY day)`` becomes
    ``_mad_scale(list(_number(x)) FILTER (WHERE (x) IS NOT NULL) OVER (ORDER BY day))``.
    """
    return [_handed_over(query, call) for call in query.calls if call.is_window]


def _handed_over(query: Query, call: Call) -> Edit:
    name = call.function.name
    columns, parameters = call.columns(), call.parameters()
    wrong = misfit(call) if call.is_plain else None
    if wrong is not None:
        raise MidspreadError(wrong)
    if not call.is_plain or columns is None or parameters is None or call.node["ignore_nulls"]:
        raise MidspreadError(
            f"{name}: OVER needs the plain form; write {call.function.signature} OVER (...)."
        )
    behind = query.tokens[call.closing].stop
    wanted = ""
    if call.filter is not None:
        start, stop = condition(query, call)
        wanted = f"({query.text[start:stop]})"
        behind = query.tokens[query.clauses.closing(call.closing + 2)].stop
    over = query.text[behind : call.stop]
    text = call.underlying(condition=wanted, over=over, distinct=call.is_distinct)
    return Edit(call.start, call.stop, text)
