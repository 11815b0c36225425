"""What the rewrite rules ask the engine's catalogue."""

from functools import cached_property

import duckdb

from midspread.engine.harmless import HARMLESS_VOLATILE_FUNCTIONS
from midspread.udfs import functions


class Catalog:
    """Look-ups in one connection's catalogue, made when first needed.

    Parameters
    ----------
    connection : duckdb.DuckDBPyConnection
        Its views and macros are those at the time of the first look-up.
    own_names : collection of str
        Our functions, which always give the same for the same values.
    """

    def __init__(self, connection: duckdb.DuckDBPyConnection, own_names: frozenset[str]) -> None:
        self._connection = connection
        self.own_names = own_names

    def is_steady(self, name: str) -> bool:
        """Whether a function gives the same for the same values within one query."""
        if name in self.own_names:
            return True
        return name not in HARMLESS_VOLATILE_FUNCTIONS and name not in self._users_macros

    def is_aggregate(self, name: str) -> bool:
        """Whether a function, ours included, makes one value of many rows."""
        return name in self._own_aggregates or name in self._aggregates

    def views(self, name: str) -> list[str]:
        """The statements that made the views of this name."""
        return self._views.get(name.lower(), [])

    @cached_property
    def _own_aggregates(self) -> frozenset[str]:
        return frozenset(name for name, one in functions().items() if one.is_aggregate)

    @cached_property
    def _users_macros(self) -> frozenset[str]:
        rows = self._connection.execute(
            "SELECT DISTINCT lower(function_name) FROM duckdb_functions() "
            "WHERE NOT internal AND function_type IN ('macro', 'table_macro')"
        ).fetchall()
        return frozenset(name for (name,) in rows if name not in self.own_names)

    @cached_property
    def _aggregates(self) -> frozenset[str]:
        rows = self._connection.execute(
            "SELECT DISTINCT lower(function_name) FROM duckdb_functions() "
            "WHERE function_type = 'aggregate'"
        ).fetchall()
        return frozenset(name for (name,) in rows)

    @cached_property
    def _views(self) -> dict[str, list[str]]:
        found: dict[str, list[str]] = {}
        for name, sql in self._connection.execute(
            "SELECT lower(view_name), sql FROM duckdb_views() WHERE NOT internal"
        ).fetchall():
            found.setdefault(name, []).append(sql)
        return found
