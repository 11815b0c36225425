"""Turns what the engine says into one sentence for the user."""

import re
from collections.abc import Mapping
from typing import TYPE_CHECKING

import duckdb

from midspread.engine.engine_errors import EngineError, in_full
from midspread.engine.errors import Interrupted, MidspreadError
from midspread.engine.explaining import Case, place
from midspread.engine.parsing import NotParsed, one_value, tokens, unquoted
from midspread.engine.sentences import SENTENCES
from midspread.engine.statements import Statement
from midspread.engine.wrong_calls import cause, is_about_a_call, wrong_form
from midspread.udfs import Function

if TYPE_CHECKING:
    from midspread.engine.running import Prepared

INTERRUPTED = "query: interrupted; nothing was changed."
_NEAR = re.compile(r'syntax error at or near "(.*)"', re.DOTALL)


class Messages:
    """Explains the errors of one session.

    Parameters
    ----------
    connection : duckdb.DuckDBPyConnection
        Asked for the names that exist.
    functions : mapping
        Our functions by name.
    """

    def __init__(
        self, connection: duckdb.DuckDBPyConnection, functions: Mapping[str, Function]
    ) -> None:
        self._connection = connection
        self._functions = functions

    def explained(
        self, error: duckdb.Error, sql: str, statement: Statement, prepared: "Prepared"
    ) -> MidspreadError:
        """The error to raise in place of one that the engine raised.

        Parameters
        ----------
        error : duckdb.Error
            What running the prepared text raised.
        sql : str
            The script.
        statement : Statement
            Which of its statements was run.
        prepared : Prepared
            The text that was run.
        """
        if isinstance(error, duckdb.InterruptException):
            return Interrupted(INTERRUPTED)
        found = in_full(self._connection, error, prepared.text)
        if found.python_error == "Stopped":
            return Interrupted(INTERRUPTED)
        if found.python_error == "ParameterError" or self._is_our_own(found.words):
            form = wrong_form(self._connection, self._functions, statement)
            return MidspreadError(form or found.words)
        index = None
        if found.position is not None:
            index = statement.start + prepared.origin(found.position)
        if is_about_a_call(found, self._functions):
            why = cause(self._connection, self._functions, statement)
            if why is not None and why.error is None:
                return MidspreadError(why.sentence)
            if why is not None and why.error is not None:
                found, index = why.error, None
                if found.position is not None:
                    index = statement.start + statement.body[0] + found.position
        return MidspreadError(self._sentence(found, sql, _at_name(found, sql, index)))

    def syntax_error(self, sql: str) -> MidspreadError:
        """The error for a script that DuckDB cannot split into statements."""
        told = one_value(self._connection, "SELECT json_serialize_sql(?::VARCHAR)", [sql])
        error = EngineError.from_json(str(told), sql)
        return MidspreadError(_syntax_sentence(sql, error.words, error.position))

    def not_parsed(self, sql: str, statement: Statement, error: NotParsed) -> MidspreadError:
        """The error for a statement whose query is no SQL."""
        index = None
        if error.position is not None:
            index = statement.start + statement.body[0] + error.position
        return MidspreadError(_syntax_sentence(sql, error.reason, index))

    def _sentence(self, error: EngineError, sql: str, index: int | None) -> str:
        for pattern, sentence in SENTENCES:
            found = pattern.search(error.words)
            if found:
                case = Case(self._connection, self._functions, error, sql, index, found)
                text = sentence(case)
                if text is not None:
                    return text
        return f"query: {error.first_line}{place(sql, index)}."

    def _is_our_own(self, words: str) -> bool:
        return words.split(":", 1)[0] in self._functions


def _at_name(error: EngineError, sql: str, index: int | None) -> int | None:
    """The place of the name that an error is about, where only its surroundings are known."""
    name = error.details.get("name")
    if index is None or not isinstance(name, str):
        return index
    for token in tokens(sql):
        if token.start >= index and unquoted(token.text).lower() == name.lower():
            return token.start
    return index


def _syntax_sentence(sql: str, reason: str, index: int | None) -> str:
    where = place(sql, index)
    if "unterminated" in reason:
        what = "comment" if "comment" in reason else "name" if "identifier" in reason else "text"
        mark = {"comment": "*/", "name": '"', "text": "'"}[what]
        return f"query: the {what} that begins{where} never ends; close it with {mark}."
    opened = _bracket_left_open(sql)
    if opened is not None:
        return f"query: the bracket {sql[opened]}{place(sql, opened)} is never closed; close it."
    found = _NEAR.search(reason)
    if found:
        return (
            f'query: the SQL cannot be read near "{found[1]}"{where}; '
            f"look there for a missing or misspelt word, comma or bracket."
        )
    return f"query: the SQL cannot be read ({reason.strip().rstrip('.')}){where}; correct it."


def _bracket_left_open(sql: str) -> int | None:
    """The first bracket that nothing closes."""
    opened: list[int] = []
    for token in tokens(sql):
        if token.text in ("(", "[", "{"):
            opened.append(token.start)
        elif token.text in (")", "]", "}"):
            if not opened:
                return None
            opened.pop()
    return opened[-1] if opened else None
