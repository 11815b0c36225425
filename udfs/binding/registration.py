"""Registers the catalogue on a DuckDB connection."""

import functools
import inspect
import json
from collections.abc import Callable, Collection, Sequence
from typing import Any

import duckdb

from midspread.udfs.binding.batches import batch_result_type, compute_batch, compute_rows
from midspread.udfs.binding.computing import (
    Work,
    compute_aggregate,
    compute_estimates,
    compute_summary,
    result_type,
    struct_type,
)
from midspread.udfs.binding.macros import aggregate_macro, row_macro, shared_macros, table_macro
from midspread.udfs.binding.profiles import COUNTS_TYPE, PROFILE_MACROS, ProfileFunctions
from midspread.udfs.catalogue import functions, needed_by
from midspread.udfs.declaring import Function, helpers
from midspread.udfs.grouped import Control
from midspread.udfs.outlying import figures as _outlying  # noqa: F401 - declares helpers
from midspread.udfs.tables.robust_summary import DEEP_FIGURES, SUMMARY_FIELDS


def register(
    connection: duckdb.DuckDBPyConnection,
    *,
    control: Control | None = None,
    threads: int | None = None,
    names: Collection[str] | None = None,
) -> None:
    """Equip a DuckDB connection with the functions of the catalogue.

    Parameters
    ----------
    connection : duckdb.DuckDBPyConnection
        Any connection or cursor. Nothing is written to its database: the functions live in the
        instance and their macros are temporary. Call it again on every further cursor.
    control : Control, optional
        Counts finished values and can stop running functions. The one given first serves all
        connections of the same instance.
    threads : int, optional
        Threads that work on one batch; DuckDB's own setting when not given.
    names : collection of str, optional
        Only these functions, for a quicker start; all of them when not given, and also when there
        is a table function among them, since those are written in terms of others.

    Examples
    --------
    >>> import duckdb
    >>> connection = duckdb.connect()
    >>> register(connection)
    >>> connection.sql("SELECT trimmed_mean(x, 0.25) FROM (VALUES (1), (2), (4), (90)) t(x)")
    """
    if threads is None:
        row = connection.execute("SELECT current_setting('threads')").fetchone()
        threads = int(row[0]) if row else 1
    known = functions()  # also imports the modules that declare helpers
    wanted = known if names is None else needed_by(names)
    listed = [function for name, function in known.items() if name in wanted]
    binding = _Binding(connection, Work(control or Control(), threads))
    binding.register_shared()
    for register_one, kind in (
        (binding.register_aggregate, "aggregate"),
        (binding.register_batch, "batch"),
        (binding.register_row_function, "row"),
    ):
        for function in listed:
            if function.kind == kind:
                register_one(function)
    for function in listed:
        if function.kind == "table":
            connection.execute(table_macro(function))


class _Binding:
    def __init__(self, connection: duckdb.DuckDBPyConnection, work: Work) -> None:
        self._connection = connection
        self._work = work

    def register_shared(self) -> None:
        """What several functions rest on: macros that collect values, helpers."""
        for macro in shared_macros():
            self._connection.execute(macro)
        self._create(
            "_estimates", compute_estimates, ["DOUBLE[]", "VARCHAR", "DOUBLE[]"], "DOUBLE[]"
        )
        for name, deep in (("_summary", ()), ("_deep_summary", DEEP_FIGURES)):
            self._create(
                name,
                functools.partial(compute_summary, deep=deep),
                ["DOUBLE[]"],
                struct_type([*SUMMARY_FIELDS, *deep]),
            )
        self._create(
            "_table_query",
            lambda _work, name, arguments: write_table_query(name, arguments),
            ["VARCHAR", "VARCHAR"],
            "VARCHAR",
            kind="native",
        )
        for one in helpers():
            self._create(one.name, one.compute, None, one.result)
        profile = ProfileFunctions(self._work.control, self._work.threads)
        self._create("_value_counts", lambda _, *a: profile.value_counts(*a), None, COUNTS_TYPE)
        self._create("_longest_run", lambda _, *a: profile.longest_run(*a), ["DOUBLE[]"], "BIGINT")
        for macro in PROFILE_MACROS:
            self._connection.execute(macro)

    def register_aggregate(self, function: Function) -> None:
        """Create the Arrow function of a kernel and the macro that calls it."""
        arguments = ["DOUBLE[]"] * len(function.columns) + ["DOUBLE"] * len(function.parameters)
        compute = functools.partial(compute_aggregate, function)
        self._create(f"_{function.name}", compute, arguments, result_type(function))
        self._connection.execute(aggregate_macro(function))

    def register_batch(self, function: Function) -> None:
        """Create the Arrow function of a batch aggregate and the macro that calls it."""
        compute = functools.partial(compute_batch, function)
        self._create(f"_{function.name}", compute, None, batch_result_type(function))
        self._connection.execute(aggregate_macro(function))

    def register_row_function(self, function: Function) -> None:
        """Create the macro of a row function, and the Arrow function where it has no SQL body."""
        if not function.body:
            compute = functools.partial(compute_rows, function)
            arguments = ["DOUBLE"] * (len(function.columns) + len(function.parameters))
            self._create(f"_{function.name}", compute, arguments, "DOUBLE")
        self._connection.execute(row_macro(function))

    def _create(
        self,
        name: str,
        function: Callable[..., Any],
        arguments: Sequence[str] | None,
        result: str,
        kind: str = "arrow",
    ) -> None:
        """Create a scalar function; without argument types it takes any number of any type."""
        work = self._work

        def called(*given: Any) -> Any:
            return function(work, *given)

        if arguments is not None:
            # DuckDB compares the number of types with the parameters it finds by inspection.
            called.__signature__ = inspect.Signature(  # type: ignore[attr-defined]
                [
                    inspect.Parameter(f"argument_{i}", inspect.Parameter.POSITIONAL_ONLY)
                    for i in range(len(arguments))
                ]
            )
        try:
            create: Any = self._connection.create_function
            create(
                name,
                called,
                None if arguments is None else list(arguments),
                result,
                type=kind,
                null_handling="special",
            )
        except (duckdb.NotImplementedException, duckdb.CatalogException) as error:
            # Another connection of the same instance has created it.
            if "already" not in str(error):
                raise


def write_table_query(name: str, arguments: str) -> str:
    """The SQL that a call of a table function stands for; arguments come as JSON."""
    writer = functions()[name].kernel
    assert writer is not None
    return str(writer(**json.loads(arguments)))
