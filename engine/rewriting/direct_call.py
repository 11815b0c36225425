"""Our functions within a macro of the user's.

A macro's parameter has no type, so the engine cannot tell which of our macros' overloads is meant;
the function behind them is called directly.
"""

from midspread.engine.rewriting.edits import Edit
from midspread.engine.rewriting.query import Query


def direct_call(query: Query) -> list[Edit]:
    """Call the function behind the macro.

    ``trimmed_mean(a, 0.1)`` becomes ``_trimmed_mean(_values(a), _number(0.1))``.
    """
    return [
        Edit(call.start, call.stop, call.underlying())
        for call in query.calls
        if call.is_plain and call.columns() is not None and call.parameters() is not None
    ]
