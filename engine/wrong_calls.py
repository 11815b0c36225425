"""Why a call of one of our functions could not be made.

The functions are macros, and the engine says of a macro only that its arguments do not fit. Here
each call is looked at by itself.
"""

import re
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final

import duckdb

from midspread.engine.engine_errors import EngineError, taken_apart
from midspread.engine.parsing import NotParsed
from midspread.engine.rewriting.edits import Edit, apply, origin, without_overlaps
from midspread.engine.rewriting.filter_clause import condition
from midspread.engine.rewriting.misfit import misfit
from midspread.engine.rewriting.query import Call, Query
from midspread.engine.statements import Statement
from midspread.udfs import Function

NUMBERS: Final = "a number (any integer type, DECIMAL, FLOAT or DOUBLE)"
_TYPED: Final = ("_number", "_values", "_text", "_flag")
_OWN_MACRO: Final = re.compile(r"Macro \"?(\w+)\"?\(\) (does not|has multiple|has named)")
_PARAMETERS: Final = {
    "number": ("_number(", ")"),
    "text": ("_text(", ")"),
    "flag": ("_flag(", ")"),
    "level": ("(", ")"),
    "column": ("any_value(", ")"),
}


@dataclass(frozen=True)
class Cause:
    """What is wrong: a sentence of ours, or the engine's error about an argument."""

    sentence: str = ""
    error: EngineError | None = None


def is_about_a_call(error: EngineError, functions: Mapping[str, Function]) -> bool:
    """Whether the engine complains about the arguments of one of our functions."""
    found = _OWN_MACRO.search(error.words)
    return found is not None and (found[1] in functions or found[1] in _TYPED)


def wrong_form(
    connection: duckdb.DuckDBPyConnection, functions: Mapping[str, Function], statement: Statement
) -> str | None:
    """What is wrong with the form of the first misformed call in a statement, if one is."""
    query = _query(connection, functions, statement)
    for call in query.calls if query else ():
        sentence = misfit(call) if call.is_plain else None
        if sentence is not None:
            return sentence
    return None


def cause(
    connection: duckdb.DuckDBPyConnection, functions: Mapping[str, Function], statement: Statement
) -> Cause | None:
    """What is wrong with the first wrong call in a statement; None when nothing is found.

    The position of an error in it is an index into the statement's body.
    """
    query = _query(connection, functions, statement)
    sentence = wrong_form(connection, functions, statement)
    if query is None or sentence is not None:
        return None if sentence is None else Cause(sentence)
    if statement.is_expression:
        return None
    for call in query.calls:
        found = _wrong_argument(query, call)
        if found is not None:
            return found
    return None


def _query(
    connection: duckdb.DuckDBPyConnection, functions: Mapping[str, Function], statement: Statement
) -> Query | None:
    body = statement.body_text
    text = f"SELECT ({body})" if statement.is_expression else body
    try:
        query = Query(connection, text, functions)
    except NotParsed:
        return None
    return query if query.text == text else None


def _wrong_argument(query: Query, call: Call) -> Cause | None:
    columns, parameters = call.columns(), call.parameters()
    if not call.is_plain or columns is None or parameters is None:
        return None
    for name, argument in zip(call.function.columns, columns, strict=True):
        around = _one_of(call) if name not in call.function.keys else _any_of(call)
        error = _planned(query, call, argument.start, argument.stop, around)
        if error is not None and is_about_a_call(error, {}):
            return Cause(
                f"{call.function.name}: {name} must be {NUMBERS}, and {argument.text} is not; "
                f"turn it into a number first, for example CAST({argument.text} AS DOUBLE) "
                f"or epoch({argument.text})."
            )
        if error is not None:
            return Cause(error=error)
    if call.filter is not None:
        start, stop = condition(query, call)
        before, after = _one_of(call)
        around = (f"{before}CASE WHEN (", f") THEN 1 END{after}")
        error = _planned(query, call, start, stop, around)
        if error is not None:
            return Cause(error=error)
    for parameter, given in parameters:
        if given is None:
            continue
        error = _planned(query, call, given.start, given.stop, _PARAMETERS[parameter.kind])
        if error is not None and is_about_a_call(error, {}):
            return Cause(
                f"{call.function.name}: {parameter.name} must be {parameter.allowed}, "
                f"and {given.text} is not; write for example {parameter.name} := "
                f"{parameter.example()}."
            )
        if error is not None:
            return Cause(error=error)
    return None


def _one_of(call: Call) -> tuple[str, str]:
    """What stands around a number where a call gives one."""
    return ("_number(" if call.is_window else "_values(", ")")


def _any_of(call: Call) -> tuple[str, str]:
    """What stands around a key where a call gives one."""
    return ("(", ")") if call.is_window else ("any_value(", ")")


def _planned(
    query: Query, call: Call, start: int, stop: int, around: tuple[str, str]
) -> EngineError | None:
    """The error of planning the query with one part of a call left, and no other call."""
    edits = [Edit(call.start, start, around[0]), Edit(stop, call.stop, around[1])]
    for other in query.calls:
        if not (call.start <= other.start and other.stop <= call.stop):
            edits.append(Edit(other.start, other.stop, "1" if other.is_window else "max(1)"))
    edits = without_overlaps(edits)
    before = "EXPLAIN "
    text = before + apply(query.text, edits)
    try:
        query.connection.execute(text).fetchall()
    except duckdb.Error as error:
        found = taken_apart(error, text)
        position = None
        if found.position is not None:
            position = origin(found.position - len(before), edits)
        return EngineError(found.kind, found.words, position, found.details)
    return None
