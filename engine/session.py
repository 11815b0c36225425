"""A session: the user's SQL guarded, rewritten, answered from the store or computed."""

import os
import time
from collections.abc import Callable, Collection, Iterator, Mapping, Sequence
from contextlib import contextmanager
from functools import partial
from pathlib import Path
from types import TracebackType
from typing import TYPE_CHECKING, Self, TypeVar
from uuid import uuid4

import duckdb

from midspread.engine.answer import Answer, Progress
from midspread.engine.caching import AnswerCache, Question, when
from midspread.engine.connecting import Attachments, checked_sources, connect
from midspread.engine.errors import MidspreadError, StoreError, UsageError
from midspread.engine.grids.reading import qualifiers
from midspread.engine.grids.sources import Source, trouble
from midspread.engine.grids.using import GridsInUse
from midspread.engine.guard import Guard
from midspread.engine.inputs.canonical import canonical_sql
from midspread.engine.inputs.scanning import mentions_of
from midspread.engine.interrupts import run_interruptibly
from midspread.engine.parsing import NotParsed, one_value
from midspread.engine.running import Runner
from midspread.engine.statements import Kind, Statement, split
from midspread.engine.store.finding import STORE_VARIABLE, find_store
from midspread.udfs import functions

if TYPE_CHECKING:
    import pyarrow as pa

    from midspread.engine.grids.computing import Computed

__all__ = ["Answer", "Progress", "Session"]

Result = TypeVar("Result")


class Session:
    """Runs SQL that only reads, with Midspread's functions.

    Temporary views, macros and variables last until the session is closed.

    Parameters
    ----------
    memory : str, optional
        Most memory to use, such as ``"4GB"``; the engine's own choice by default.
    threads : int, optional
        How many threads compute; all by default.
    store : Path, optional
        Where answers are kept. By default ``MIDSPREAD_STORE``, else ``midspread.duckdb`` in the
        folder or the nearest one above it, else created in the folder.
    use_store : bool
        Whether to keep answers and look for kept ones at all.
    folder : Path, optional
        Where the search for the store begins; the current one by default.
    sources : mapping of str to Path
        DuckDB files to attach, for reading only, by name.
    on_notice : callable, optional
        Takes lines that the user should see beside an answer.
    on_progress : callable, optional
        Takes `Progress` about ten times a second while a query runs.

    Examples
    --------
    >>> with Session(use_store=False) as session:
    ...     session.query("SELECT trimmed_mean(x, 0.25) FROM range(5) t(x)").rows()
    [(2.0,)]
    """

    def __init__(
        self,
        *,
        memory: str | None = None,
        threads: int | None = None,
        store: Path | None = None,
        use_store: bool = True,
        folder: Path | None = None,
        sources: Mapping[str, Path] | None = None,
        on_notice: Callable[[str], None] | None = None,
        on_progress: Callable[[Progress], None] | None = None,
    ) -> None:
        self._notices: list[str] = []
        self._on_notice = on_notice
        self._on_progress = on_progress
        self._functions = functions()
        checked = checked_sources(sources or {})
        self._connection = connect(memory=memory, threads=threads, owner=self)
        self._attachments = Attachments(self._connection, checked)
        self._runner = Runner(self._connection, self._functions)
        self._table_functions = {
            name: function.columns
            for name, function in self._functions.items()
            if function.kind == "table"
        }
        self._guard = Guard(self._connection, self._functions.keys(), self._table_functions)
        self._cache: AnswerCache | None = None
        self._grids: GridsInUse | None = None
        if use_store:
            path = find_store(folder or Path(), store)
            is_named = store is not None or bool(os.environ.get(STORE_VARIABLE))
            self._cache = AnswerCache(path, is_named, self._functions, self._notice)
            self._grids = GridsInUse(path, self._connection)
        self._definitions: list[str] = []
        self._settings: set[str] = set()
        self._pending: list[tuple[str, Statement]] = []
        self._has_macros = bool(checked)

    def query(self, sql: str, *, recompute: bool = False) -> Answer:
        """The answer to the last SELECT of a script.

        Parameters
        ----------
        sql : str
            One or more statements; earlier SELECTs are not run.
        recompute : bool
            Whether to compute it even where the store has it.

        Raises
        ------
        MidspreadError
            With one sentence for the user.
        """
        statements = self._read(sql)
        last = max((i for i, one in enumerate(statements) if one.answers), default=None)
        if last is None:
            self._define_now(sql, statements)
            raise MidspreadError(
                "query: the SQL defines things and asks for none; end it with a SELECT."
            )
        for statement in statements[:last]:
            if not statement.answers:
                self._define(sql, statement)
        answer = self._answer(sql, statements[last], recompute)
        self._define_now(sql, statements[last + 1 :])
        return answer

    def run(self, sql: str, *, recompute: bool = False) -> Iterator[Answer]:
        """The answers to all SELECTs of a script, one after the other.

        The script is read and guarded as a whole before its first statement runs.
        """
        statements = self._read(sql)
        return self._run(sql, statements, recompute)

    def expand(self, sql: str) -> str:
        """The SQL that would be run in place of a script; no query of it is run."""
        statements = self._read(sql)
        self._bring_grids([*self._definitions, *(statement.text for statement in statements)])
        texts = []
        for statement in statements:
            if not statement.answers:
                self._define_now(sql, [statement])
            self._settle()
            texts.append(self._runner.expand(statement))
        return ";\n".join(texts)

    def materialise(self, command: str, sql: str) -> "Computed":
        """Compute a script's one query into a scratch database, there until the session closes.

        Parameters
        ----------
        command : str
            Who asks, for messages.
        sql : str
            Definitions, then one SELECT.

        Raises
        ------
        MidspreadError
            With one sentence for the user.
        """
        from midspread.engine.grids.computing import Computed, Inquiry
        from midspread.engine.grids.grouping import grouped_by
        from midspread.engine.grids.reading import tables_read

        statements = self._read(sql)
        last = statements[-1]
        if last.kind is not Kind.QUERY or sum(one.answers for one in statements) != 1:
            raise UsageError(
                f"{command}: the SQL must be one SELECT, with definitions before it; "
                f"split it, or turn all but the last into temporary views."
            )
        for statement in statements[:-1]:
            self._define(sql, statement)
        script = [*self._definitions, last.text]
        self._attachments.attach_given()
        read = tables_read(self._connection, statements, self._table_functions)
        reads = [name for name in self._bring_grids(script) if name.casefold() in read]
        self._settle()
        watcher = Inquiry(
            script,
            self._connection,
            self._functions,
            {name: stamp for name, stamp in self._stamps().items() if name in read},
        )
        scratch = one_value(self._connection, "SELECT current_setting('temp_directory')")
        path = Path(str(scratch)) / f"{uuid4().hex}.duckdb"
        rows, columns = self._watched(
            partial(self._runner.write, sql, last, path, watcher.watching)
        )
        return Computed(
            path,
            columns,
            rows,
            watcher.record(),
            tuple(reads),
            grouped_by(self._connection, last.body_text),
        )

    @contextmanager
    def cursor(self) -> Iterator[duckdb.DuckDBPyConnection]:
        """Another connection to the session's engine, for questions of our own."""
        with self._connection.cursor() as cursor:
            yield cursor

    def interrupt(self) -> None:
        """Stop the query that is running, from another thread; the session stays usable."""
        self._runner.stop()

    def close(self) -> None:
        """Give everything back. The session cannot be used afterwards."""
        self._connection.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    def _notice(self, line: str) -> None:
        self._notices.append(line)
        if self._on_notice is not None:
            self._on_notice(line)

    def _read(self, sql: str) -> list[Statement]:
        """The statements of a script, once all of them are known to be harmless."""
        try:
            statements = split(self._connection, sql)
        except duckdb.Error:
            raise self._runner.messages.syntax_error(sql) from None
        for statement in statements:
            try:
                self._guard.check(statement)
            except NotParsed as error:
                raise self._runner.messages.not_parsed(sql, statement, error) from None
        return statements

    def _run(self, sql: str, statements: list[Statement], recompute: bool) -> Iterator[Answer]:
        for statement in statements:
            if statement.answers:
                yield self._answer(sql, statement, recompute)
            else:
                self._define(sql, statement)
        if statements and not statements[-1].answers:
            self._settle()

    def _define(self, sql: str, statement: Statement) -> None:
        """Note a definition; it is made when the first query is computed that follows it."""
        self._has_macros = self._has_macros or statement.kind is Kind.MACRO
        text = canonical_sql(statement.text)
        if text in self._definitions:
            self._definitions.remove(text)  # said again, as a repeated script does
        self._definitions.append(text)
        if statement.kind is Kind.SETTING and statement.name not in ("schema", "search_path"):
            self._settings.add(text)
        self._pending.append((sql, statement))

    def _define_now(self, sql: str, statements: list[Statement]) -> None:
        """Make definitions that no query follows, so that what is wrong with them is said."""
        for statement in statements:
            self._define(sql, statement)
        if statements:
            self._settle()

    def _answer(self, sql: str, statement: Statement, recompute: bool) -> Answer:
        self._notices = []
        self._attachments.attach_given()
        question = None
        script = [*self._definitions, statement.text]
        self._warn_of_stale(self._bring_grids(script))
        if self._cache is not None and statement.kind is Kind.QUERY:
            question = self._cache.question(
                script, self._settings, self._connection, self._has_macros, self._stamps()
            )
            kept = None if question is None or recompute else self._cache.find(question)
            if kept is not None:
                self._notice(f"answered from the store, kept {when(kept.kept)}")
                return Answer(statement.text, kept.table, kept.kept, self._notices)
        table = self._compute(sql, statement, question)
        return Answer(statement.text, table, None, self._notices)

    def _compute(self, sql: str, statement: Statement, question: Question | None) -> "pa.Table":
        if self._cache is None or question is None:
            self._settle()
            return self._watched(partial(self._runner.answer, sql, statement))
        with self._cache.watch(question, self._connection) as watch:
            self._settle()
            table = self._watched(partial(self._runner.answer, sql, statement))
        if watch is not None:
            self._cache.keep(question, watch, statement.text, table, self._connection)
        return table

    def _bring_grids(self, script: Sequence[str]) -> list[str]:
        """Make the grids and sources that a script names readable; which the grids are."""
        if self._grids is None:
            return []
        names: set[str] = set()
        for statement in script:
            names |= mentions_of(statement, self._table_functions).names
        try:
            grids = self._grids.bring(names)
        except StoreError:
            return []  # a store that cannot be read turns off the cache with a word of its own
        self._attach_remembered(script, names)
        return grids

    def _warn_of_stale(self, read: Sequence[str]) -> None:
        if self._grids is not None and read:
            with self.cursor() as connection:
                for line in self._grids.stale(read, connection, self._functions):
                    self._notice(line)

    def _stamps(self) -> dict[str, int]:
        return self._grids.stamps if self._grids is not None else {}

    def _attach_remembered(self, script: Sequence[str], names: Collection[str]) -> None:
        """Attach the store's sources that a script names, unless --attach gave others."""
        if self._grids is None or self._grids.sources.keys().isdisjoint(names):
            return
        with self.cursor() as connection:
            heads = qualifiers(connection, script, self._table_functions)
        for folded, source in self._grids.sources.items():
            if folded in names and not self._attachments.is_given(folded):
                self._attach_source(source, self._grids.path.parent, is_read=folded in heads)

    def _attach_source(self, source: Source, folder: Path, *, is_read: bool) -> None:
        """Attach one; a word that is only spelt like its name is no reason to complain."""
        why = trouble(source, folder)
        try:
            if why:
                self._attachments.drop(source.name)
                raise MidspreadError(f"query: the source {source.name} {why}.")
            self._attachments.add(source.name, source.file(folder))
            self._has_macros = True
        except MidspreadError:
            if is_read:
                raise

    def _settle(self) -> None:
        """Make what has been defined but not yet been needed."""
        self._attachments.attach_given()
        while self._pending:
            sql, statement = self._pending.pop(0)
            try:
                self._watched(partial(self._runner.define, sql, statement))
            except MidspreadError:
                self._definitions.remove(canonical_sql(statement.text))
                self._pending.clear()
                raise

    def _watched(self, work: Callable[[], Result]) -> Result:
        began = time.monotonic()

        def report() -> None:
            assert self._on_progress is not None
            self._on_progress(self._runner.progress(time.monotonic() - began))

        self._runner.allow()  # a stop that came too late for one query is not meant for the next
        return run_interruptibly(
            work, self._runner.stop, report if self._on_progress is not None else None
        )
