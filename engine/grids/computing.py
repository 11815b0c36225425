"""What computing a grid's query gives, before it is written to the store."""

import time
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import UTC, datetime
from importlib.metadata import version
from pathlib import Path

import duckdb

from midspread.engine.grids.model import Record
from midspread.engine.inputs.called import named_in
from midspread.engine.inputs.fingerprints import (
    InputsState,
    InputWatch,
    inputs_of,
    reason_not_to_keep,
)
from midspread.udfs import Function


@dataclass(frozen=True)
class Computed:
    """Rows on disk, not yet in the store.

    Attributes
    ----------
    path : Path
        A DuckDB file whose table `RESULT` holds the rows.
    columns : tuple of (str, str)
        Names and types.
    rows : int
        How many there are.
    record : Record
        What they rest on.
    reads : tuple of str
        The grids that were read.
    grouped_by : tuple of str
        The result's columns that the query groups by; empty when it groups by none.
    """

    path: Path
    columns: tuple[tuple[str, str], ...]
    rows: int
    record: Record
    reads: tuple[str, ...]
    grouped_by: tuple[str, ...]


class Inquiry:
    """What a script rests on, looked at before, while and after it runs.

    Parameters
    ----------
    script : sequence of str
        Definitions, then the query.
    connection : duckdb.DuckDBPyConnection
        Where it runs.
    functions : mapping
        Our functions by name, for their versions.
    grids : mapping
        Stamps of the grids that are tables of the session.
    """

    def __init__(
        self,
        script: Sequence[str],
        connection: duckdb.DuckDBPyConnection,
        functions: Mapping[str, Function],
        grids: Mapping[str, int],
    ) -> None:
        self._script = script
        self._connection = connection
        self._functions = functions
        self._tables = [name for name, one in functions.items() if one.kind == "table"]
        self._inputs = inputs_of(
            script, connection.cursor(), table_functions=self._tables, grids=grids
        )
        self._grids = grids
        self._before = self._inputs.look()
        self._obstacle = ""
        self._seconds = 0.0

    @contextmanager
    def watching(self) -> Iterator[None]:
        """Held while the query runs."""
        began = time.monotonic()
        with InputWatch(self._connection) as watch:
            yield
        self._seconds = time.monotonic() - began
        after = self._inputs.look()
        reason = reason_not_to_keep(
            self._script,
            self._connection.cursor(),
            self._before,
            watch,
            after,
            table_functions=self._tables,
        )
        self._obstacle = reason or ""

    def record(self) -> Record:
        """What the rows rest on; call it when the query has run."""
        text = ";".join([*self._script, *self._before.definitions.values()])
        called = named_in(text, self._functions)
        return Record(
            files=files_of(self._before),
            definitions={
                name: body
                for name, body in self._before.definitions.items()
                if not name.startswith("grid ")
            },
            grids={
                name.removeprefix("grid "): int(stamp)
                for name, stamp in self._before.definitions.items()
                if name.startswith("grid ")
            },
            functions={name: function.version for name, function in called.items()},
            seeds={
                name: int(float(str(parameter.default)))
                for name, function in called.items()
                for parameter in function.parameters
                if parameter.name == "seed"
            },
            duckdb=duckdb.__version__,
            midspread=version("midspread"),
            computed=datetime.now(UTC).isoformat(timespec="seconds"),
            seconds=round(self._seconds, 3),
            obstacle=self._obstacle,
        )


def files_of(state: InputsState) -> dict[str, list[list[object]]]:
    """The files behind each pattern as a record keeps them."""
    return {
        one.pattern: [[f.path, f.size, f.mtime_ns, f.ctime_ns, f.inode] for f in one.files]
        for one in state.matched
    }
