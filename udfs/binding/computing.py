"""Aggregates with a compiled kernel, computed over batches of Arrow lists."""

from collections.abc import Container, Iterable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pyarrow as pa

from midspread.udfs.binding.arrow_columns import (
    arrow_mask,
    arrow_view,
    is_missing,
    numbers_or_null,
    numpy_view,
    single_chunk,
)
from midspread.udfs.catalogue import functions
from midspread.udfs.declaring import NULL, Function, Values, null_mask
from midspread.udfs.drivers import driver, summary_driver
from midspread.udfs.grouped import Control, Groups, Task, row_numbers, run
from midspread.udfs.parameters import ParameterError, shown
from midspread.udfs.tables.robust_summary import SUMMARY_FIELDS, summarise


@dataclass(frozen=True)
class Work:
    """What every computation is given besides its values.

    Attributes
    ----------
    control : Control
        Counts finished values and asks to stop.
    threads : int
        At most so many threads work on one batch.
    """

    control: Control
    threads: int


def compute_aggregate(function: Function, work: Work, *arguments: Any) -> pa.Array:
    """The answers of one function for every group of a batch."""
    columns = len(function.columns)
    groups = groups_of(*arguments[:columns])
    if "w" in function.columns:
        _check_weights(function.name, groups.weights)
    parameters = _parameter_rows(function, arguments[columns:])
    lengths = groups.lengths
    counts = np.ones_like(lengths)
    if function.rows:
        counts = _record_counts(function, lengths)
    rows = row_numbers(counts)
    out = np.full((int(rows[-1]), max(len(function.fields), 1)), NULL)
    task = Task(driver(function), parameters, function.smallest_n, 0)
    run(groups, [task], out, rows, work.control, work.threads)
    if function.rows:
        return _lists_of_records(function, out, rows)
    if function.fields:
        return _records(function, out, lengths < function.smallest_n)
    return numbers_or_null(out[:, 0])


def compute_estimates(work: Work, lists: Any, names: Any, parameters: Any) -> pa.Array:
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
    run(groups, tasks, out, row_numbers(np.ones(count, np.int64)), work.control, work.threads)
    offsets = np.arange(count + 1, dtype=np.int32) * len(wanted)
    return pa.ListArray.from_arrays(arrow_view(offsets), numbers_or_null(out.reshape(-1)))


def compute_summary(work: Work, lists: Any, *, deep: tuple[str, ...]) -> pa.Array:
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
    run(groups, tasks, out, row_numbers(np.ones(count, np.int64)), work.control, work.threads)
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


def result_type(function: Function) -> str:
    """The SQL type of an aggregate's answer."""
    if not function.fields:
        return "DOUBLE"
    return struct_type(function.fields, function.labels) + ("[]" if function.rows else "")


def struct_type(fields: Iterable[str], texts: Container[str] = ()) -> str:
    """A record of numbers, and of texts where said."""
    listed = (f'"{name}" {"VARCHAR" if name in texts else "DOUBLE"}' for name in fields)
    return f"STRUCT({', '.join(listed)})"
