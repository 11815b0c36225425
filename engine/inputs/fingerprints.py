"""Whether what an answer rests on is unchanged.

An answer may be kept under a fingerprint of its inputs, and given again while the fingerprint is
the same. The steps, for whoever runs queries::

    inputs = inputs_of(script, connection)
    before = inputs.look()              # before.fingerprint is None: neither look up nor keep
    ... look the answer up; otherwise ...
    with InputWatch(connection) as watch:
        ... run the script ...
    reason = reason_not_to_keep(script, connection, before, watch, inputs.look())
"""

import hashlib
import json
import os
import time
from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass

import duckdb

from midspread.engine.inputs.definitions import meaning_of, own_names, own_table_functions
from midspread.engine.inputs.files import (
    FINE_GRAIN_NS,
    FileState,
    Matched,
    is_remote,
    match,
    now_ns,
    states,
)
from midspread.engine.inputs.volatile import why_volatile
from midspread.engine.inputs.watching import InputWatch

__all__ = [
    "FileState",
    "InputWatch",
    "Inputs",
    "InputsState",
    "inputs_of",
    "reason_not_to_keep",
]


@dataclass(frozen=True)
class InputsState:
    """What an answer rests on, at one moment.

    Attributes
    ----------
    matched : tuple of Matched
        The files behind every path, pattern and attached database.
    definitions : dict
        Text of the views and macros behind the script.
    obstacle : str or None
        Why the answer must be neither looked up nor kept, in words.
    """

    matched: tuple[Matched, ...]
    definitions: dict[str, str]
    obstacle: str | None

    @property
    def fingerprint(self) -> str | None:
        """Digest of everything here; None when there is an obstacle."""
        if self.obstacle is not None:
            return None
        return hashlib.blake2b(self.to_json().encode(), digest_size=24).hexdigest()

    @property
    def files(self) -> frozenset[str]:
        """Absolute paths of every file found."""
        return frozenset(
            os.path.normpath(state.path) for matched in self.matched for state in matched.files
        )

    def to_json(self) -> str:
        """Spell it out, as kept beside an answer."""
        files = {
            one.pattern: [(f.path, f.size, f.mtime_ns, f.ctime_ns, f.inode) for f in one.files]
            for one in self.matched
        }
        record = {"files": files, "definitions": self.definitions}
        return json.dumps(record, ensure_ascii=True, sort_keys=True)


@dataclass(frozen=True)
class Inputs:
    """What a script rests on: patterns of files, databases, definitions.

    Attributes
    ----------
    patterns : tuple of str
        Paths and globs.
    databases : dict
        Files of attached databases, by alias.
    definitions : dict
        Text of the views and macros behind the script.
    obstacle : str or None
        Why the inputs cannot be known, in words.
    connection : duckdb.DuckDBPyConnection
        Where patterns are matched.
    seen : dict
        What attached files were when they were first looked at: the engine reads that file on,
        whatever has taken its name since.
    """

    patterns: tuple[str, ...]
    databases: dict[str, str]
    definitions: dict[str, str]
    obstacle: str | None
    connection: duckdb.DuckDBPyConnection
    seen: dict[str, tuple[FileState, ...]]

    def look(self) -> InputsState:
        """Look at every file, waiting a moment where one has only just changed."""
        if self.obstacle is not None:
            return InputsState((), self.definitions, self.obstacle)
        matched = self._match()
        wait = _settling(matched) - now_ns()
        if 0 < wait <= FINE_GRAIN_NS:
            time.sleep(wait / 1e9)
            matched = self._match()
        return InputsState(matched, self.definitions, self._obstacle(matched, now_ns()))

    def _match(self) -> tuple[Matched, ...]:
        matched = [match(pattern, self.connection) for pattern in self.patterns]
        matched += [Matched(path, states([path])) for path in self.databases.values()]
        return tuple(matched)

    def _obstacle(self, matched: Sequence[Matched], now: int) -> str | None:
        """Say why what was found cannot be relied on, or None."""
        for one in matched:
            if not one.is_regular:
                return f"{one.pattern} is not a regular file"
            for state in one.files:
                if state.settles_ns() > now:
                    return f"{state.path} changed a moment ago"
        for path, one in zip(self.databases.values(), matched[len(self.patterns) :], strict=True):
            if self.seen.setdefault(path, one.files) != one.files:
                return f"{path} has been replaced since it was attached"
        return None

    def fingerprint(self) -> str | None:
        """Digest of the inputs as they are now; None when they cannot be known."""
        return self.look().fingerprint


def inputs_of(
    script: Sequence[str],
    connection: duckdb.DuckDBPyConnection,
    *,
    table_functions: Collection[str] | None = None,
    macros_possible: bool = True,
    seen: dict[str, tuple[FileState, ...]] | None = None,
    grids: Mapping[str, int] | None = None,
) -> Inputs:
    """Find what a script rests on, without running it.

    Parameters
    ----------
    script : sequence of str
        The statements up to the one whose answer is wanted, as the user wrote them.
    connection : duckdb.DuckDBPyConnection
        Where they run. It must not be in the middle of another result; hand over a cursor.
    table_functions : collection of str, optional
        Our own table functions; by default those of the catalogue.
    macros_possible : bool
        Pass False when nobody can have made a macro, in this session or an attached database;
        it saves a search of about 10 ms.
    seen : dict, optional
        One dict for the life of the connection, empty at first: it notices when an attached file
        is replaced by another.
    grids : mapping, optional
        Stamps of the grids that are tables of this session, by folded name.

    Returns
    -------
    Inputs
    """
    own_tables = own_table_functions() if table_functions is None else frozenset(table_functions)
    names = own_names() if macros_possible else frozenset[str]()
    meaning = meaning_of(
        script,
        connection,
        own_tables,
        names | own_tables,
        macros_possible=macros_possible,
        grids=grids,
    )
    obstacle = meaning.obstacle
    paths = meaning.mentions.paths
    if meaning.mentions.computed:
        obstacle = "a path or a table's name is computed by the query"
    elif any(map(is_remote, paths)):
        obstacle = "a path leads to another machine"
    elif connection.execute("SELECT current_setting('file_search_path')").fetchall()[0][0]:
        obstacle = "the setting file_search_path is in use"
    return Inputs(
        tuple(sorted(paths)),
        meaning.databases,
        meaning.definitions,
        obstacle,
        connection,
        {} if seen is None else seen,
    )


def reason_not_to_keep(
    script: Sequence[str],
    connection: duckdb.DuckDBPyConnection,
    before: InputsState,
    watch: InputWatch,
    after: InputsState,
    *,
    table_functions: Collection[str] | None = None,
) -> str | None:
    """Say why the answer of a script must not be kept, or None.

    Parameters
    ----------
    script : sequence of str
        The statements that were run.
    connection : duckdb.DuckDBPyConnection
        Where they ran.
    before, after : InputsState
        What its inputs were before and after.
    watch : InputWatch
        What was opened meanwhile.
    table_functions : collection of str, optional
        Our own table functions; by default those of the catalogue.

    Returns
    -------
    str or None
    """
    if before.obstacle is not None:
        return before.obstacle
    if before.fingerprint != after.fingerprint:
        return "an input changed while the query ran"
    if watch.opened is None:
        return "the session's own logging is in use"
    strangers = sorted(watch.opened - before.files)
    if strangers:
        return f"{strangers[0]} was read though no path in the query leads to it"
    return why_volatile(script, connection, table_functions=table_functions)


def _settling(matched: Sequence[Matched]) -> int:
    """Give the time at which the last change of all can be trusted."""
    return max((state.settles_ns() for one in matched for state in one.files), default=0)
