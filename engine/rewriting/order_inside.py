"""ORDER BY within the brackets of our functions.

Macros take none, and no statistic of ours depends on the order of the rows.
"""

from midspread.engine.rewriting.edits import Edit
from midspread.engine.rewriting.query import Query


def order_inside(query: Query) -> list[Edit]:
    """Leave out the ORDER BY.

    ``trimmed_mean(x, 0.1 ORDER BY day)`` becomes ``trimmed_mean(x, 0.1)``.
    """
    return [
        Edit(call.arguments[-1].stop, query.tokens[call.closing].start, "")
        for call in query.calls
        if call.is_ordered_inside and call.is_plain and call.arguments
    ]
