"""Several of our functions over one sort.

Sorting the values of a group costs more than every estimator after it, so functions of one column
that stand in one SELECT are computed together. The call that does it is the same text wherever one
of them stood, and DuckDB computes equal calls once.
"""

from collections.abc import Iterable
from math import isfinite

from midspread.engine.parsing import Node, function_name, literal, nodes
from midspread.engine.rewriting.catalog import Catalog
from midspread.engine.rewriting.edits import Edit
from midspread.engine.rewriting.query import Argument, Call, Query, same
from midspread.udfs import Parameter

_NUMBERS = ("INTEGER", "NUMERIC", "FLOAT")


def shared_sort(query: Query, catalog: Catalog) -> list[Edit]:
    """Compute functions of the same column together.

    ``trimmed_mean(x, 0.1), mad_scale(x)`` becomes
    ``_estimates(_values(x), 'trimmed_mean,mad_scale', [_number(0.1)])[1]`` and the same with
    ``[2]``.
    """
    edits: list[Edit] = []
    for calls in _same_column(query, catalog):
        members: list[tuple[str, tuple[str, ...]]] = []
        for call in calls:
            member = _member(call)
            if member not in members:
                members.append(member)
        if len(members) < 2:
            continue
        names = ",".join(name for name, _ in members)
        given = ", ".join(f"_number({text})" for _, texts in members for text in texts)
        columns = calls[0].columns()
        assert columns is not None
        together = (
            f"_estimates(_values({columns[0].text}), {literal(names)}, "
            f"{f'[{given}]' if given else '[]::DOUBLE[]'})"
        )
        edits += [
            Edit(call.start, call.stop, f"{together}[{members.index(_member(call)) + 1}]")
            for call in calls
        ]
    return edits


def _same_column(query: Query, catalog: Catalog) -> Iterable[list[Call]]:
    """The calls that may be computed together, by SELECT and column."""
    groups: list[list[Call]] = []
    for call in query.calls:
        if not _may_share(call, catalog):
            continue
        column = (call.columns() or [])[0].node
        for group in groups:
            others = group[0].columns() or []
            if group[0].select == call.select and same(others[0].node, column):
                group.append(call)
                break
        else:
            groups.append([call])
    return [_evaluated_for_the_same_groups(group) for group in groups]


def _may_share(call: Call, catalog: Catalog) -> bool:
    columns, parameters = call.columns(), call.parameters()
    if not call.function.shares_sort or not call.is_plain or call.select < 0:
        return False
    if call.is_window or call.is_distinct or call.filter is not None or call.is_ordered_inside:
        return False
    if columns is None or parameters is None or not _repeats(columns[0].node, catalog):
        return False
    for parameter, argument in parameters:
        if argument is None or _is_allowed_number(parameter, argument):
            continue
        if call.conditional or not _repeats(argument.node, catalog):
            return False
    return True


def _evaluated_for_the_same_groups(calls: list[Call]) -> list[Call]:
    """Leave out calls whose parameters could be checked for groups they were not meant for."""
    if all(call.clause == "select_list" and not call.conditional for call in calls):
        return calls
    return [call for call in calls if _has_allowed_numbers(call)]


def _has_allowed_numbers(call: Call) -> bool:
    return all(
        argument is None or _is_allowed_number(parameter, argument)
        for parameter, argument in call.parameters() or ()
    )


def _is_allowed_number(parameter: Parameter, argument: Argument) -> bool:
    """Whether a parameter is a number written out, and one that raises no error."""
    written = argument.node.get("literal")
    if not isinstance(written, dict) or written.get("kind") not in _NUMBERS:
        return False
    value = float(written["text"])
    above = value > parameter.low if parameter.low_open else value >= parameter.low
    below = value < parameter.high if parameter.high_open else value <= parameter.high
    return above and below and isfinite(value) and (not parameter.whole or value.is_integer())


def _member(call: Call) -> tuple[str, tuple[str, ...]]:
    return call.function.name, tuple(
        argument.text if argument else str(parameter.default)
        for parameter, argument in call.parameters() or ()
    )


def _repeats(node: Node, catalog: Catalog) -> bool:
    """Whether an expression gives the same however often it is evaluated."""
    for part in nodes(node):
        name = function_name(part)
        if part.get("class") in ("STAR", "SUBQUERY") or (name and not catalog.is_steady(name)):
            return False
    return True
