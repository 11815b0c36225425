"""Which files the engine opens while a query runs."""

import os
import re
from types import TracebackType

import duckdb

# The engine does not escape paths in this record, so it is read from both ends.
_OPENED = re.compile(r'^\{"fs":"[^"]*","path":"(.*)","op":"OPEN"', re.DOTALL)
_SETTINGS = ("logging_level", "logging_mode", "enabled_log_types", "disabled_log_types")


class InputWatch:
    """Record the files opened on a connection's database, as a context manager.

    Attributes
    ----------
    opened : frozenset of str or None
        Absolute paths, once the block has ended; None when the connection was logging for
        somebody else, which is then left alone.

    Parameters
    ----------
    connection : duckdb.DuckDBPyConnection
        Any connection to the database; all its connections are watched.
    """

    def __init__(self, connection: duckdb.DuckDBPyConnection) -> None:
        self.opened: frozenset[str] | None = frozenset()
        self._cursor = connection.cursor()
        self._before: dict[str, str] = {}

    def __enter__(self) -> "InputWatch":
        names = ", ".join(f"current_setting('{name}')" for name in ("enable_logging", *_SETTINGS))
        enabled, *values = self._cursor.execute(f"SELECT {names}").fetchall()[0]
        if enabled:
            self.opened = None
            return self
        self._before = dict(zip(_SETTINGS, values, strict=True))
        self._cursor.execute("CALL enable_logging('FileSystem')")
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        try:
            if self._before:
                self._stop(completed=kind is None)
        finally:
            self._cursor.close()

    def _stop(self, *, completed: bool) -> None:
        self._cursor.execute("CALL disable_logging()")
        if completed:
            self.opened = self._read()
        self._cursor.execute("CALL truncate_duckdb_logs()")
        # The mode comes last: setting the types sets a mode of its own.
        for name in ("logging_level", "enabled_log_types", "disabled_log_types", "logging_mode"):
            text = self._before[name].replace("'", "''")
            self._cursor.execute(f"SET {name} = '{text}'")

    def _read(self) -> frozenset[str]:
        rows = self._cursor.execute(
            "SELECT DISTINCT message FROM duckdb_logs"
            " WHERE type = 'FileSystem' AND contains(message, '\"op\":\"OPEN\"')"
        ).fetchall()
        scratch = self._cursor.execute("SELECT current_setting('temp_directory')").fetchall()[0][0]
        paths = {found[1] for (message,) in rows if (found := _OPENED.match(message))}
        opened = frozenset(os.path.abspath(path) for path in paths)  # noqa: PTH100
        if not scratch:
            return opened
        prefix = os.path.join(os.path.abspath(scratch), "")  # noqa: PTH100, PTH118
        return frozenset(path for path in opened if not path.startswith(prefix))
