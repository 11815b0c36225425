"""Our functions within a macro of the user's.

A macro's parameter has no type, so the engine cannot tell which of our macros' overloads is meant;
the function behind them is called directly.
"""

from midspread.engine.rewriting.edits import Edit
from midspread.engine.rewriting.query import Call, Query


def direct_call(query: Query) -> list[Edit]:
    """Call the function behind the macro.

    ``trimmed_mean(a, 0.1)`` becomes ``_trimmed_mean(_values(a), _number(0.1))``.
    """
    return [
        Edit(call.start, call.stop, _direct(call))
        for call in query.calls
        if call.is_plain and call.columns() is not None and call.parameters() is not None
    ]


def _direct(call: Call) -> str:
    columns = [column.text for column in call.columns() or ()]
    if len(columns) == 1:
        given = [f"_values({columns[0]})"]
    else:
        first, second = columns
        given = [f"_values_of_pairs({first}, {second})", f"_values_of_pairs({second}, {first})"]
    given += [
        f"_number({argument.text if argument else parameter.default})"
        for parameter, argument in call.parameters() or ()
    ]
    return f"_{call.function.name}({', '.join(given)})"
