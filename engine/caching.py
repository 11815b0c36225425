"""Whether an answer is already in the store, and keeping it there.

A kept answer is given again only while the query, its files, the settings and the versions of the
functions it uses are the same.
"""

import hashlib
import json
from collections.abc import Callable, Collection, Mapping, Sequence
from contextlib import AbstractContextManager, nullcontext
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import TYPE_CHECKING, Final

import duckdb

from midspread.engine.errors import (
    NotAStore,
    StoreDamaged,
    StoreError,
    StoreTooNew,
)
from midspread.engine.harmless import SETTINGS_THAT_CHANGE_RESULTS
from midspread.engine.inputs.canonical import canonical_sql
from midspread.engine.inputs.fingerprints import (
    FileState,
    Inputs,
    InputsState,
    InputWatch,
    inputs_of,
    reason_not_to_keep,
)
from midspread.engine.store.answers import Answers, KeptAnswer
from midspread.engine.store.store import Store
from midspread.udfs import Function

if TYPE_CHECKING:
    import pyarrow as pa

_ANSWERS: Final = 1  # raised when the engine comes to answer some query otherwise than before
_UNUSABLE: Final = (NotAStore, StoreDamaged, StoreTooNew)


@dataclass(frozen=True)
class Question:
    """A query together with everything its answer rests on.

    Attributes
    ----------
    key : str
        Under which its answer is kept.
    script : tuple of str
        The definitions before it, and the query; settings are left out.
    inputs : Inputs
        The files, databases and views behind it.
    before : InputsState
        What they were when the question was asked.
    """

    key: str
    script: tuple[str, ...]
    inputs: Inputs
    before: InputsState


class AnswerCache:
    """The kept answers as one session sees them.

    A store that cannot be used turns the cache off with a notice; where the user named the store,
    it is an error instead.

    Parameters
    ----------
    path : Path
        Of the store, which is created with the first answer kept.
    is_named : bool
        Whether the user named it.
    functions : mapping
        Our functions by name, for their versions.
    on_notice : callable
        Takes a line for the user.
    """

    def __init__(
        self,
        path: Path,
        is_named: bool,
        functions: Mapping[str, Function],
        on_notice: Callable[[str], None],
    ) -> None:
        self._path = path
        self._is_named = is_named
        self._functions = functions
        self._on_notice = on_notice
        self._answers: Answers | None = None
        self._is_off = False
        self._seen: dict[str, tuple[FileState, ...]] = {}

    def question(
        self,
        script: Sequence[str],
        settings: Collection[str],
        connection: duckdb.DuckDBPyConnection,
        macros_possible: bool,
        grids: Mapping[str, int] | None = None,
    ) -> Question | None:
        """Look at what a query rests on; None when its answer can be neither found nor kept.

        Parameters
        ----------
        script : sequence of str
            The definitions before the query, and the query.
        settings : collection of str
            Those statements of it that only change a setting.
        connection : duckdb.DuckDBPyConnection
            The session's.
        macros_possible : bool
            Whether there may be macros that are not ours.
        grids : mapping, optional
            Stamps of the grids that are tables of the session.
        """
        if self._is_off:
            return None
        inputs = inputs_of(
            script,
            connection.cursor(),
            table_functions=self._tables(),
            macros_possible=macros_possible,
            seen=self._seen,
            grids=grids,
        )
        before = inputs.look()
        if before.fingerprint is None:
            return None
        key = self._key(script, before, connection)
        asking = tuple(statement for statement in script if statement not in settings)
        return Question(key, asking, inputs, before)

    def find(self, question: Question) -> KeptAnswer | None:
        """The kept answer, if there is one."""
        if not self._path.exists():
            return None
        answers = self._opened()
        if answers is None:
            return None
        try:
            return answers.find(question.key)
        except StoreError as error:
            self._turn_off(error)
            return None

    def watch(
        self, question: Question | None, connection: duckdb.DuckDBPyConnection
    ) -> AbstractContextManager[InputWatch | None]:
        """Record the files that are opened while a question is being answered."""
        return nullcontext() if question is None else InputWatch(connection)

    def keep(
        self,
        question: Question,
        watch: InputWatch,
        sql: str,
        table: "pa.Table",
        connection: duckdb.DuckDBPyConnection,
    ) -> None:
        """Keep an answer unless it could be another one next time."""
        reason = reason_not_to_keep(
            question.script,
            connection.cursor(),
            question.before,
            watch,
            question.inputs.look(),
            table_functions=self._tables(),
        )
        if reason is not None:
            return
        is_new = not self._path.exists()
        answers = self._opened()
        if answers is None:
            return
        try:
            answers.keep(question.key, sql, table, question.before.to_json())
        except StoreError as error:
            self._turn_off(error)
            return
        if is_new:
            self._on_notice(f"a store for answers was created: {self._path}")

    def _opened(self) -> Answers | None:
        if self._answers is None and not self._is_off:
            try:
                self._answers = Answers(Store.open(self._path))
            except StoreError as error:
                self._turn_off(error)
        return self._answers

    def _turn_off(self, error: StoreError) -> None:
        self._answers, self._is_off = None, True
        if self._is_named and isinstance(error, _UNUSABLE):
            raise error
        self._on_notice(f"cache off: {error}")

    def _tables(self) -> Collection[str]:
        return [name for name, function in self._functions.items() if function.kind == "table"]

    def _key(
        self, script: Sequence[str], before: InputsState, connection: duckdb.DuckDBPyConnection
    ) -> str:
        text = ";".join([*script, *before.definitions.values()]).lower()
        names = ["search_path", *SETTINGS_THAT_CHANGE_RESULTS]
        settings = connection.execute(
            f"SELECT {', '.join(f'current_setting({name!r})::VARCHAR' for name in names)}"
        ).fetchall()
        rests_on = {
            "sql": [canonical_sql(statement) for statement in script],
            "inputs": before.fingerprint,
            "settings": settings,
            "functions": {
                name: function.version for name, function in self._functions.items() if name in text
            },
            "answers": _ANSWERS,
            "duckdb": duckdb.__version__,
        }
        return hashlib.blake2b(json.dumps(rests_on).encode(), digest_size=24).hexdigest()


def when(moment: datetime) -> str:
    """A moment in the user's own time, to the minute."""
    return moment.astimezone().strftime("%Y-%m-%d %H:%M")
