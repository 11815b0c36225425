"""A grid's rows, copied out of the store so that nobody waits for a push."""

from collections.abc import Iterator
from pathlib import Path
from types import TracebackType
from typing import TYPE_CHECKING, Final, Self

from midspread.engine.connecting import connect
from midspread.engine.errors import MidspreadError
from midspread.engine.grids.model import Grid
from midspread.engine.parsing import literal, one_value, quoted
from midspread.engine.pushing.target import Field
from midspread.engine.store.store import Store

if TYPE_CHECKING:
    import pyarrow as pa

_TABLE: Final = "scratch.main.rows"
_HIDDEN: Final = "_midspread_store"
_ROWS_IN_BATCH: Final = 50_000


class GridRows:
    """The rows of a grid on a connection of their own, on disk until closed.

    Parameters
    ----------
    memory, threads : optional
        Limits of the connection.

    Attributes
    ----------
    connection : duckdb.DuckDBPyConnection
        Where they are.
    table : str
        Their table, as SQL.
    fields : tuple of Field
        Their columns.
    count : int
        How many there are.
    """

    table = _TABLE

    def __init__(self, memory: str | None = None, threads: int | None = None) -> None:
        self.connection = connect(memory=memory, threads=threads, owner=self)
        self.connection.execute("SET errors_as_json = false")
        self.connection.execute("SET TimeZone = 'UTC'")
        self.fields: tuple[Field, ...] = ()
        self.count = 0
        self._sent = 0

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.connection.close()

    def copy(self, store: Store, grid: Grid) -> None:
        """Copy them from the store.

        Raises
        ------
        MidspreadError
            When the grid has been changed since it was looked at.
        """
        run = self.connection.execute
        scratch = one_value(self.connection, "SELECT current_setting('temp_directory')")
        run(f"ATTACH {literal(str(Path(str(scratch)) / 'rows.duckdb'))} AS scratch")
        with store.sharing():
            run(f"ATTACH {literal(str(store.path))} AS {_HIDDEN} (TYPE duckdb, READ_ONLY)")
            try:
                stamps = run(
                    f"SELECT stamp FROM {_HIDDEN}.ledger.grids WHERE lower(grid) = lower($1)",
                    [grid.name],
                ).fetchall()
                if stamps != [(grid.stamp,)]:
                    raise MidspreadError(
                        f"push: {grid.name} was changed by another command meanwhile; push again."
                    )
                run(f"CREATE TABLE {_TABLE} AS FROM {_HIDDEN}.main.{quoted(grid.name)}")
            finally:
                run(f"DETACH {_HIDDEN}")
        described = run(f"DESCRIBE {_TABLE}").fetchall()
        self.fields = tuple(Field(str(row[0]), str(row[1])) for row in described)
        self.count = self.number(f"SELECT count(*) FROM {_TABLE}")

    def number(self, sql: str) -> int:
        """The one whole number that a query gives."""
        return int(self.connection.execute(sql).fetchall()[0][0])

    def has(self, condition: str) -> bool:
        """Whether a condition holds for some row."""
        return bool(self.number(f"SELECT EXISTS (FROM {_TABLE} WHERE {condition})::INT"))

    def check_key(self, keys: list[str]) -> None:
        """Raise unless each row has a key of its own."""
        listed = ", ".join(quoted(key) for key in keys)
        twice = self.connection.execute(
            f"SELECT count(*), [{', '.join(f'{quoted(k)}::VARCHAR' for k in keys)}] FROM {_TABLE}"
            f" GROUP BY {listed} HAVING count(*) > 1 ORDER BY ALL DESC LIMIT 1"
        ).fetchall()
        if twice:
            values = ", ".join("NULL" if value is None else str(value) for value in twice[0][1])
            raise MidspreadError(
                f"push: {twice[0][0]} rows of the grid have the key {values} ({', '.join(keys)}), "
                f"and a key must be there once; name more columns with --key."
            )

    def batches(self, expressions: list[str]) -> "pa.RecordBatchReader":
        """All rows, some at a time, each column as an expression gives it."""
        import pyarrow as pa

        listed = ", ".join(expressions)
        reader = self.connection.sql(f"SELECT {listed} FROM {_TABLE}").to_arrow_reader(
            _ROWS_IN_BATCH
        )
        return pa.RecordBatchReader.from_batches(reader.schema, self._counted(reader))

    def _counted(self, reader: "pa.RecordBatchReader") -> Iterator["pa.RecordBatch"]:
        self._sent = 0
        for batch in reader:
            self._sent += batch.num_rows
            yield batch

    @property
    def share_sent(self) -> float | None:
        """What share of the rows has been handed over; None before the first and after the last."""
        return self._sent / self.count if 0 < self._sent < self.count else None
