"""The catalogue as DuckDB functions.

DuckDB's Python interface registers scalar functions only. An aggregate is therefore a macro
over a list: ``trimmed_mean(x, share)`` stands for ``_trimmed_mean(_values(x), share)``, where
``_values(x)`` collects a group's non-NULL values and ``_trimmed_mean`` is an Arrow function over
batches of such lists.
"""

import functools
import inspect
import json
from collections.abc import Callable, Container, Iterable, Sequence
from typing import Any, Final

import duckdb
import numpy as np
import pyarrow as pa

from midspread.udfs.arrow_columns import (
    arrow_mask,
    arrow_view,
    is_missing,
    numbers_or_null,
    numpy_view,
    single_chunk,
)
from midspread.udfs.catalogue import functions
from midspread.udfs.declaring import (
    NULL,
    Function,
    Parameter,
    ParameterError,
    Values,
    null_mask,
    shown,
)
from midspread.udfs.drivers import driver, summary_driver
from midspread.udfs.grouped import Control, Groups, Task, row_numbers, run
from midspread.udfs.profile_binding import COUNTS_TYPE, PROFILE_MACROS, ProfileFunctions
from midspread.udfs.tables.robust_summary import DEEP_FIGURES, SUMMARY_FIELDS, summarise

NUMBER_TYPES: Final = "a number (any integer type, DECIMAL, FLOAT or DOUBLE)"
_OTHER_TYPES: Final = (
    "VARCHAR",
    "BOOLEAN",
    "DATE",
    "TIME",
    "TIMESTAMP",
    "TIMESTAMP WITH TIME ZONE",
    "INTERVAL",
    "BLOB",
    "UUID",
)


def register(
    connection: duckdb.DuckDBPyConnection,
    *,
    control: Control | None = None,
    threads: int | None = None,
) -> None:
    """Equip a DuckDB connection with every function of the catalogue.

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

    Examples
    --------
    >>> import duckdb
    >>> connection = duckdb.connect()
    >>> register(connection)
    >>> connection.sql("SELECT trimmed_mean(x, 0.25) FROM (VALUES (1), (2), (4), (90)) t(x)")
    """
    if control is None:
        control = Control()
    if threads is None:
        row = connection.execute("SELECT current_setting('threads')").fetchone()
        threads = int(row[0]) if row else 1
    binding = _Binding(connection, control, threads)
    binding.register_shared()
    for function in functions().values():
        if function.kind == "aggregate":
            binding.register_aggregate(function)
    for function in functions().values():
        if function.kind == "table":
            connection.execute(table_macro(function))


class _Binding:
    def __init__(
        self, connection: duckdb.DuckDBPyConnection, control: Control, threads: int
    ) -> None:
        self._connection = connection
        self._control = control
        self._threads = threads

    def register_shared(self) -> None:
        """What all functions rest on: the macros that collect values, the shared-sort function."""
        self._connection.execute(
            "CREATE OR REPLACE TEMP MACRO _values(x DOUBLE) AS list(x) FILTER (x IS NOT NULL)"
        )
        self._connection.execute(
            "CREATE OR REPLACE TEMP MACRO _values_of_pairs(x DOUBLE, w DOUBLE) AS "
            "list(x) FILTER (x IS NOT NULL AND w IS NOT NULL)"
        )
        self._create("_estimates", self._estimates, ["DOUBLE[]", "VARCHAR", "DOUBLE[]"], "DOUBLE[]")
        number_macros = [
            f"({'x ' + kind}, function_name, column_name) AS error(function_name || ': ' || "
            f"column_name || ' must be {NUMBER_TYPES}, not {kind}; turn it into a number first, "
            f"for example with CAST(' || column_name || ' AS DOUBLE).')"
            for kind in _OTHER_TYPES
        ]
        number_macros.append(
            "(x, function_name, column_name) AS error(function_name || ': ' || column_name || "
            f"' must be {NUMBER_TYPES}, not ' || typeof(any_value(x)) || "
            "'; take the numbers out of it first, in a query in parentheses.')"
        )
        self._connection.execute(
            "CREATE OR REPLACE TEMP MACRO _numbers(x DOUBLE, function_name, column_name) AS "
            f"list(x) FILTER (x IS NOT NULL), {', '.join(number_macros)}"
        )
        for name, deep in (("_summary", ()), ("_deep_summary", DEEP_FIGURES)):
            self._create(
                name,
                functools.partial(self._summary, deep=deep),
                ["DOUBLE[]"],
                _struct_type([*SUMMARY_FIELDS, *deep]),
            )
        self._create(
            "_table_query", write_table_query, ["VARCHAR", "VARCHAR"], "VARCHAR", kind="native"
        )
        profile = ProfileFunctions(self._control, self._threads)
        self._create("_value_counts", profile.value_counts, None, COUNTS_TYPE)
        self._create("_longest_run", profile.longest_run, ["DOUBLE[]"], "BIGINT")
        for macro in PROFILE_MACROS:
            self._connection.execute(macro)

    def register_aggregate(self, function: Function) -> None:
        """Create the Arrow function and the macro that calls it."""
        lists = ["DOUBLE[]"] * len(function.columns)
        numbers = ["DOUBLE"] * len(function.parameters)

        def answer(*arguments: Any) -> pa.Array:
            return self._aggregate(function, arguments)

        arguments = [*lists, *numbers]
        self._create(f"_{function.name}", answer, arguments, _result_type(function))
        self._connection.execute(aggregate_macro(function))

    def _create(
        self,
        name: str,
        function: Callable[..., Any],
        arguments: Sequence[str] | None,
        result: str,
        kind: str = "arrow",
    ) -> None:
        """Create a scalar function; without argument types it takes any number of any type."""

        def called(*given: Any) -> Any:
            return function(*given)

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

    def _aggregate(self, function: Function, arguments: tuple[Any, ...]) -> pa.Array:
        columns = len(function.columns)
        groups = groups_of(*arguments[:columns])
        if groups.weights.size:
            _check_weights(function.name, groups.weights)
        parameters = _parameter_rows(function, arguments[columns:])
        lengths = groups.lengths
        counts = np.ones_like(lengths)
        if function.rows:
            counts = _record_counts(function, lengths)
        rows = row_numbers(counts)
        out = np.full((int(rows[-1]), max(len(function.fields), 1)), NULL)
        task = Task(driver(function), parameters, function.smallest_n, 0)
        run(groups, [task], out, rows, self._control, self._threads)
        if function.rows:
            return _lists_of_records(function, out, rows)
        if function.fields:
            return _records(function, out, lengths < function.smallest_n)
        return numbers_or_null(out[:, 0])

    def _estimates(self, lists: Any, names: Any, parameters: Any) -> pa.Array:
        """Several functions over one sort; see the shared-sort rewrite of the engine."""
        groups = groups_of(lists)
        count = len(groups.offsets) - 1
        wanted = [functions()[name] for name in single_chunk(names)[0].as_py().split(",")]
        given = _matrix(single_chunk(parameters), count)
        out = np.full((count, len(wanted)), NULL)
        tasks = []
        row = 0
        for column, function in enumerate(wanted):
            own = given[row : row + len(function.parameters)]
            row += len(function.parameters)
            for parameter, values in zip(function.parameters, own, strict=True):
                parameter.check(function.name, values, null_mask(values))
            tasks.append(Task(driver(function), own, function.smallest_n, column))
        run(groups, tasks, out, row_numbers(np.ones(count, np.int64)), self._control, self._threads)
        offsets = np.arange(count + 1, dtype=np.int32) * len(wanted)
        return pa.ListArray.from_arrays(arrow_view(offsets), numbers_or_null(out.reshape(-1)))

    def _summary(self, lists: Any, *, deep: tuple[str, ...]) -> pa.Array:
        """The figures of robust_summary; the deep ones come from the functions' own loops."""
        groups = groups_of(lists)
        fields = [*SUMMARY_FIELDS, *deep]
        count = len(groups.offsets) - 1
        out = np.full((count, len(fields)), NULL)
        no_parameters = np.empty((0, 1))
        tasks = [Task(summary_driver("summary", summarise), no_parameters, 1, 0)]
        for place, name in enumerate(deep, start=len(SUMMARY_FIELDS)):
            function = functions()[name]
            tasks.append(Task(driver(function), no_parameters, function.smallest_n, place))
        run(groups, tasks, out, row_numbers(np.ones(count, np.int64)), self._control, self._threads)
        arrays = [numbers_or_null(np.ascontiguousarray(out[:, i])) for i in range(len(fields))]
        return pa.StructArray.from_arrays(arrays, names=fields)


def groups_of(lists: Any, weights: Any = None) -> Groups:
    """The groups behind Arrow lists; a NULL list is an empty group. Values are not copied."""
    lists = single_chunk(lists)
    offsets = numpy_view(lists.offsets).astype(np.int64)
    values = _floats(lists.values)
    if weights is None:
        return Groups(values, offsets)
    weights = single_chunk(weights)
    return Groups(values, offsets, _floats(weights.values))


def _floats(array: pa.Array) -> Values:
    if array.null_count:
        raise ParameterError("a list handed to a statistic must hold no NULL; filter them first.")
    return numpy_view(array)


def _matrix(lists: pa.Array, count: int) -> Values:
    """Lists of equal length as a matrix, one column a group; NULL becomes the NULL marker."""
    values = lists.values
    numbers = numpy_view(values).astype(np.float64)
    if values.null_count:
        numbers[is_missing(values)] = NULL
    return np.ascontiguousarray(numbers.reshape(count, -1).T)


def _parameter_rows(function: Function, arguments: Sequence[Any]) -> Values:
    """Checked parameters, one row each, one column a group."""
    rows = []
    for parameter, argument in zip(function.parameters, arguments, strict=True):
        array = single_chunk(argument)
        missing = is_missing(array)
        values = np.where(missing, np.nan, numpy_view(array))
        parameter.check(function.name, values, missing)
        rows.append(values)
    return np.ascontiguousarray(rows, dtype=np.float64) if rows else np.empty((0, 1))


def _check_weights(function: str, weights: Values) -> None:
    wrong = weights[weights < 0]
    if wrong.size:
        raise ParameterError(
            f"{function}: weights must be 0 or more, got {shown(wrong[0])}; "
            f"leave such rows out or set their weight to 0."
        )


def _record_counts(function: Function, lengths: Any) -> Any:
    assert function.rows is not None
    distinct, inverse = np.unique(lengths, return_inverse=True)
    counts = [0 if n < function.smallest_n else function.rows(int(n)) for n in distinct]
    return np.array(counts, dtype=np.int64)[inverse]


def _field_array(function: Function, name: str, numbers: Values) -> pa.Array:
    labels = function.labels.get(name)
    if labels is None:
        return numbers_or_null(np.ascontiguousarray(numbers))
    return pa.array([None if np.isnan(v) else labels[int(v)] for v in numbers], pa.string())


def _records(function: Function, out: Values, missing: Any = None) -> pa.StructArray:
    arrays = [_field_array(function, name, out[:, i]) for i, name in enumerate(function.fields)]
    mask = None if missing is None else arrow_mask(missing)
    return pa.StructArray.from_arrays(arrays, names=list(function.fields), mask=mask)


def _lists_of_records(function: Function, out: Values, rows: Any) -> pa.ListArray:
    empty = np.diff(rows) == 0
    return pa.ListArray.from_arrays(
        arrow_view(rows.astype(np.int32)), _records(function, out), mask=arrow_mask(empty)
    )


def _result_type(function: Function) -> str:
    if not function.fields:
        return "DOUBLE"
    return _struct_type(function.fields, function.labels) + ("[]" if function.rows else "")


def _struct_type(fields: Iterable[str], texts: Container[str] = ()) -> str:
    listed = (f'"{name}" {"VARCHAR" if name in texts else "DOUBLE"}' for name in fields)
    return f"STRUCT({', '.join(listed)})"


def aggregate_macro(function: Function) -> str:
    """The statement that creates an aggregate's macro.

    A typed parameter takes every numeric type and nothing else; more overloads answer other types
    with a sentence of ours: those of simple types at once, while the engine plans.
    """
    parameters = [_macro_parameter(parameter) for parameter in function.parameters]
    if function.columns == ("x", "w"):
        collected = ["_values_of_pairs(x, w)", "_values_of_pairs(w, x)"]
    else:
        # Not `_values(x)`: a macro within a macro does not work under OVER.
        collected = ["list(x) FILTER (x IS NOT NULL)"]
    names = [parameter.name for parameter in function.parameters]
    call = f"_{function.name}({', '.join([*collected, *names])})"
    numbers = [f"{column} DOUBLE" for column in function.columns]
    overloads = [f"({', '.join([*numbers, *parameters])}) AS {call}"]
    for wrong, column in enumerate(function.columns):
        before, after = numbers[:wrong], [*numbers[wrong + 1 :], *parameters]
        for other in _OTHER_TYPES:
            sentence = _quoted(wrong_type(function.name, column, other))
            listed = ", ".join([*before, f"{column} {other}", *after])
            overloads.append(f"({listed}) AS error({sentence})")
        start = _quoted(f"{function.name}: {column} must be {NUMBER_TYPES}, not ")
        overloads.append(
            f"({', '.join([*before, column, *after])}) AS error({start} || "
            f"typeof(any_value({column})) || '; take the numbers out of it first.')"
        )
    for wrong, parameter in enumerate(function.parameters):
        # Without its default, so that a call which leaves it out fits the first overload only.
        name = _identifier(parameter.name)
        listed = ", ".join([*numbers, *parameters[:wrong], name, *parameters[wrong + 1 :]])
        start = _quoted(f"{function.name}: {parameter.name} must be {parameter.allowed}, got type ")
        end = _quoted(f"; write for example {parameter.name} := {parameter.example()}.")
        overloads.append(f"({listed}) AS error({start} || typeof(any_value({name})) || {end})")
    return f"CREATE OR REPLACE TEMP MACRO {function.name}{', '.join(overloads)}"


def wrong_type(function: str, column: str, given: str) -> str:
    """The sentence about a column of a type that no statistic takes."""
    return (
        f"{function}: {column} must be {NUMBER_TYPES}, not {given}; "
        f"turn it into a number first, for example CAST({column} AS DOUBLE) or epoch({column})."
    )


def table_macro(function: Function) -> str:
    """The statement that creates a table function's macro.

    The query it stands for is written by the function's own Python code while DuckDB plans.
    """
    arguments = [*function.columns, *(parameter.name for parameter in function.parameters)]
    handed = ", ".join(f"{_quoted(name)}: {_identifier(name)}" for name in arguments)
    parameters = [_identifier(name) for name in function.columns]
    parameters += [_macro_parameter(parameter, typed=False) for parameter in function.parameters]
    return (
        f"CREATE OR REPLACE TEMP MACRO {function.name}({', '.join(parameters)}) AS TABLE "
        f"SELECT * FROM query(_table_query({_quoted(function.name)}, "
        f"CAST(to_json({{{handed}}}) AS VARCHAR)))"
    )


def write_table_query(name: str, arguments: str) -> str:
    """The SQL that a call of a table function stands for; arguments come as JSON."""
    writer = functions()[name].kernel
    assert writer is not None
    return str(writer(**json.loads(arguments)))


def _macro_parameter(parameter: Parameter, *, typed: bool = True) -> str:
    name = _identifier(parameter.name)
    declaration = f"{name} DOUBLE" if typed else name
    default = parameter.default
    if default is None:
        return declaration
    if isinstance(default, bool):
        return f"{declaration} := {str(default).lower()}"
    return f"{declaration} := {default}"


def _identifier(name: str) -> str:
    return f'"{name}"'


def _quoted(text: str) -> str:
    return "'" + text.replace("'", "''") + "'"
