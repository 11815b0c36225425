"""Runs statements: our functions registered, the text rewritten, errors put in our words."""

from collections.abc import Callable, Mapping
from contextlib import AbstractContextManager
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Final, TypeVar

import duckdb

from midspread.engine.answer import Progress
from midspread.engine.grids.model import RESULT
from midspread.engine.inputs.called import named_in
from midspread.engine.parsing import NotParsed, literal
from midspread.engine.statements import Kind, Statement
from midspread.udfs import Function
from midspread.udfs.catalogue import needed_by

if TYPE_CHECKING:
    import pyarrow as pa

    from midspread.engine.messages import Messages
    from midspread.engine.rewriting import Rewritten
    from midspread.udfs import Control

Result = TypeVar("Result")

_BEFORE_EXPRESSION: Final = "SELECT ("
_WITH_QUERY: Final = (Kind.QUERY, Kind.EXPLAIN, Kind.VIEW, Kind.MACRO, Kind.VARIABLE)
_REFUSED_WHILE_PLANNING: Final = (
    duckdb.BinderException,
    duckdb.CatalogException,
    duckdb.NotImplementedException,
    duckdb.ParserException,
)


@dataclass(frozen=True)
class Prepared:
    """The text to run for a statement.

    Attributes
    ----------
    text : str
        The statement with its query rewritten.
    is_faster : bool
        Whether a rewrite was used that could be left out.
    origin : callable
        From an index into the text to one into the user's statement.
    """

    text: str
    is_faster: bool
    origin: Callable[[int], int]


class Runner:
    """Runs the statements of one session on its connection.

    Parameters
    ----------
    connection : duckdb.DuckDBPyConnection
        Our functions are registered on it when the first statement runs.
    functions : mapping
        Our functions by name.
    """

    def __init__(
        self,
        connection: duckdb.DuckDBPyConnection,
        functions: Mapping[str, Function],
    ) -> None:
        self._connection = connection
        self._functions = functions
        self._control: Control | None = None
        self._equipped: set[str] = set()

    @cached_property
    def messages(self) -> "Messages":
        """Puts errors in our words; loaded when there is one."""
        from midspread.engine.messages import Messages

        return Messages(self._connection, self._functions)

    def answer(self, sql: str, statement: Statement) -> "pa.Table":
        """The rows that a query gives."""
        return self._run(sql, statement, self._rows)

    def write(
        self,
        sql: str,
        statement: Statement,
        path: Path,
        watching: Callable[[], AbstractContextManager[object]],
    ) -> tuple[int, tuple[tuple[str, str], ...]]:
        """Write the rows of a query into a new database file; their number, names and types."""
        database, run = "_midspread_result", self._connection.execute
        self._equip()
        run(f"ATTACH {literal(str(path))} AS {database}")
        try:
            table = f"{database}.main.{RESULT}"
            with watching():
                self._run(sql, statement, lambda text: run(f"CREATE TABLE {table} AS {text}"))
            rows = run(f"SELECT count(*) FROM {table}").fetchall()[0][0]
            described = run(f"DESCRIBE {table}").fetchall()
            return rows, tuple((str(row[0]), str(row[1])) for row in described)
        finally:
            run(f"DETACH {database}")

    def define(self, sql: str, statement: Statement) -> None:
        """Make a view, macro or variable, or change a setting."""
        self._run(sql, statement, lambda text: self._connection.execute(text).fetchall())

    def expand(self, statement: Statement) -> str:
        """The text that would be run; falls back as running does where planning refuses it."""
        self._equip()
        prepared = self._prepare(statement, faster=True)
        if prepared.is_faster and not self._can_be_planned(prepared.text, statement):
            prepared = self._prepare(statement, faster=False)
        return prepared.text

    def progress(self, seconds: float) -> Progress:
        """How far the running query is."""
        percent = self._connection.query_progress()
        fraction = percent / 100 if 0 <= percent <= 100 else None
        return Progress(fraction, self._control.done if self._control else 0, seconds)

    def stop(self) -> None:
        """Ask the running statement to end."""
        if self._control is not None:
            self._control.stop()
        self._connection.interrupt()

    def allow(self) -> None:
        """Allow statements to run again after `stop`."""
        if self._control is not None:
            self._control.reset()

    def _equip(self, text: str | None = None) -> bool:
        """Register the functions that a text names, without a text all; whether any were missing.

        To register all of them takes a tenth of a second.
        """
        wanted = needed_by(self._functions if text is None else named_in(text, self._functions))
        if wanted <= self._equipped:
            return False
        from midspread.udfs import Control, register

        control = self._control or Control()
        register(self._connection, control=control, names=wanted)
        self._control = control
        self._equipped |= wanted
        return True

    def _run(self, sql: str, statement: Statement, act: Callable[[str], Result]) -> Result:
        self._equip(statement.text)
        prepared = self._prepare(statement, faster=True)
        try:
            try:
                return self._planned(prepared.text, act)
            except _REFUSED_WHILE_PLANNING:
                if not prepared.is_faster:
                    raise
                prepared = self._prepare(statement, faster=False)
                return act(prepared.text)
        except duckdb.Error as error:
            raise self.messages.explained(error, sql, statement, prepared) from None

    def _planned(self, text: str, act: Callable[[str], Result]) -> Result:
        """Act on a text; once more with all functions where only a view or a macro names one."""
        try:
            return act(text)
        except _REFUSED_WHILE_PLANNING:
            if not self._equip():
                raise
            return act(text)

    def _rows(self, text: str) -> "pa.Table":
        # A relation hands over Arrow without another copy of the rows, execute() does not.
        relation = self._connection.sql(text)
        table: pa.Table = relation.to_arrow_table()
        return table

    def _can_be_planned(self, text: str, statement: Statement) -> bool:
        if statement.kind is not Kind.QUERY:
            return True
        try:
            self._connection.execute(f"EXPLAIN {text}").fetchall()
        except _REFUSED_WHILE_PLANNING:
            return False
        except duckdb.Error:
            return True
        return True

    def _prepare(self, statement: Statement, *, faster: bool) -> Prepared:
        if statement.kind not in _WITH_QUERY:
            return Prepared(statement.text, False, lambda index: index)
        start, stop = statement.body
        body = statement.body_text
        before = _BEFORE_EXPRESSION if statement.is_expression else ""
        readable = f"{before}{body})" if before else body
        rewritten = self._rewritten(
            readable, faster=faster, keep_names=not before, in_macro=statement.kind is Kind.MACRO
        )
        text = rewritten.text[len(before) : -1] if before else rewritten.text

        def origin(index: int) -> int:
            if index < start:
                return index
            if index >= start + len(text):
                return index - start - len(text) + stop
            return rewritten.origin(index - start + len(before)) - len(before) + start

        return Prepared(
            statement.text[:start] + text + statement.text[stop:], rewritten.is_faster, origin
        )

    def _rewritten(self, text: str, *, faster: bool, **how: bool) -> "Rewritten":
        # Kept answers are found without the rules.
        from midspread.engine.rewriting import rewrite

        try:
            return rewrite(self._connection, text, self._functions, faster=faster, **how)
        except NotParsed:
            if not faster:
                raise
            return rewrite(self._connection, text, self._functions, faster=False, **how)
