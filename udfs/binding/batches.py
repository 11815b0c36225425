"""Aggregates written for a whole batch of groups, and functions of single rows."""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import pyarrow as pa

from midspread.udfs.binding.arrow_columns import (
    arrow_mask,
    arrow_view,
    is_missing,
    numbers_or_null,
    numpy_view,
    single_chunk,
)
from midspread.udfs.binding.computing import Work, groups_of
from midspread.udfs.declaring import NO_RECORD, Function, Values, null_mask
from midspread.udfs.drivers import Indices
from midspread.udfs.grouped import Groups
from midspread.udfs.parameters import ParameterError


@dataclass(frozen=True)
class Keys:
    """The values of a column of any simple type, replaced by their ranks.

    Attributes
    ----------
    codes : ndarray of int64
        For each row of the batch the rank of its value among `values`; −1 for NULL.
    values : pyarrow array
        The distinct values of the batch in ascending order.
    """

    codes: Indices
    values: pa.Array


class Batch:
    """What a batch aggregate works on: columns and parameters of many groups.

    Attributes
    ----------
    work : Work
        Threads, progress and the request to stop.
    size : int
        Number of groups.
    offsets : ndarray of int64, shape (size + 1,)
        Group i holds rows ``offsets[i] : offsets[i + 1]`` of every column.
    """

    def __init__(self, function: Function, work: Work, arguments: Sequence[Any]) -> None:
        self.function = function
        self.work = work
        further = [p.name for p in function.parameters if p.kind == "column"]
        names = [*function.columns, *further]
        self._lists = dict(zip(names, map(single_chunk, arguments), strict=False))
        scalars = [p for p in function.parameters if p.kind != "column"]
        self._given = dict(
            zip((p.name for p in scalars), map(single_chunk, arguments[len(names) :]), strict=True)
        )
        self._parameters = {p.name: p for p in function.parameters}
        first = self._lists[names[0]]
        self.offsets: Indices = numpy_view(first.offsets).astype(np.int64)
        self.size = len(first)

    @property
    def lengths(self) -> Indices:
        """Number of rows of each group."""
        return np.diff(self.offsets)

    def groups(self, column: str, weights: str | None = None) -> Groups:
        """A column of numbers, with another along, for loops over sorted groups."""
        return groups_of(self._lists[column], None if weights is None else self._lists[weights])

    def numbers(self, column: str) -> Values:
        """A column of numbers: float64, no NULL, −0.0 turned into 0.0; NaN as it is."""
        return self.groups(column).values + 0.0

    def keys(self, column: str) -> Keys:
        """A column of any simple type as ranks of its values."""
        return ranked(self.function.name, column, self._lists[column].values)

    def has(self, column: str) -> bool:
        """Whether an optional column is given: it holds anything but NULL."""
        values = self._lists[column].values
        return not pa.types.is_null(values.type) and values.null_count < len(values)

    def number(self, name: str) -> Values:
        """A checked parameter, one a group; NaN where an optional one is NULL."""
        parameter, array = self._parameters[name], self._given[name]
        kind = array.type
        if pa.types.is_null(kind):
            missing, values = np.ones(self.size, dtype=np.bool_), np.full(self.size, np.nan)
        elif pa.types.is_integer(kind) or pa.types.is_floating(kind) or pa.types.is_decimal(kind):
            missing = is_missing(array)
            values = np.where(missing, np.nan, numpy_view(array.cast(pa.float64())))
        else:
            raise parameter.refused(self.function.name, f"type {kind}")
        parameter.check(self.function.name, values, missing)
        return values

    def texts(self, name: str) -> list[str]:
        """A text parameter, one a group."""
        parameter = self._parameters[name]
        kept: dict[Any, str] = {}
        found = []
        for given in self._given[name].to_pylist():
            if given not in kept:
                kept[given] = parameter.check_text(self.function.name, given)
            found.append(kept[given])
        return found

    def flags(self, name: str) -> npt.NDArray[np.bool_]:
        """A parameter that is true or false, one a group."""
        array = self._given[name]
        if not pa.types.is_boolean(array.type) or array.null_count:
            given = "NULL" if array.null_count else f"type {array.type}"
            raise self._parameters[name].refused(self.function.name, given)
        return np.array(array.to_pylist(), dtype=np.bool_)

    def levels(self, name: str, column: str) -> Indices:
        """A parameter that is a value of a key column, as its rank; −1 for NULL.

        Raises
        ------
        ParameterError
            When the value is nowhere in the column.
        """
        array, values = self._given[name], self.keys(column).values
        if pa.types.is_null(array.type):
            return np.full(self.size, -1, dtype=np.int64)
        import pyarrow.compute as pc  # slow to import, and most queries do without

        codes = pc.index_in(array, value_set=values)
        unknown = is_missing(codes) & ~is_missing(array)
        if unknown.any():
            place = int(np.flatnonzero(unknown)[0])
            shown = ", ".join(str(v) for v in values.slice(0, 5).to_pylist())
            raise self._parameters[name].refused(
                self.function.name,
                str(array[place].as_py()),
                f"{column} holds {shown}{', …' if len(values) > 5 else ''}.",
            )
        return np.where(is_missing(codes), -1, numpy_view(codes)).astype(np.int64)


def ranked(function: str, column: str, values: pa.Array) -> Keys:
    """Values of any simple type as their ranks: equal content gives equal ranks, in any order.

    Raises
    ------
    ParameterError
        When the values are records or lists.
    """
    import pyarrow.compute as pc  # slow to import, and most queries do without

    values = single_chunk(values)
    if pa.types.is_null(values.type):
        return Keys(np.full(len(values), -1, dtype=np.int64), values.slice(0, 0))
    if pa.types.is_nested(values.type):
        raise ParameterError(
            f"{function}: {column} must be a number, text or date, not a record or list; "
            f"give one of its fields, or CAST({column} AS VARCHAR)."
        )
    if pa.types.is_floating(values.type):
        values = pa.array(numpy_view(values) + 0.0, mask=is_missing(values))
    encoded = values if pa.types.is_dictionary(values.type) else values.dictionary_encode()
    encoded = single_chunk(encoded)
    dictionary = encoded.dictionary
    order = numpy_view(pc.sort_indices(dictionary)).astype(np.int64)
    ranks = np.empty(order.size, dtype=np.int64)
    ranks[order] = np.arange(order.size)
    missing = is_missing(encoded.indices)
    indices = np.where(missing, 0, numpy_view(encoded.indices)).astype(np.int64)
    codes = ranks[indices] if ranks.size else indices
    return Keys(np.where(missing, -1, codes), dictionary.take(pa.array(order)))


def compute_batch(function: Function, work: Work, *arguments: Any) -> pa.Array:
    """The records that a batch aggregate gives for every group."""
    assert function.kernel is not None
    batch = Batch(function, work, arguments)
    found = function.kernel(batch)
    missing = batch.lengths < function.smallest_n
    if NO_RECORD in found:
        missing |= found[NO_RECORD]
    return records(function.fields, function.field_types, found, missing)


def records(
    fields: Iterable[str],
    types: Mapping[str, str],
    found: Mapping[str, Any],
    missing: npt.NDArray[np.bool_],
) -> pa.StructArray:
    """One record a group from an array a field; NaN in a field of whole numbers is NULL."""
    arrays = [_field(found[name], types.get(name, "DOUBLE")) for name in fields]
    return pa.StructArray.from_arrays(arrays, names=list(fields), mask=arrow_mask(missing))


def _field(column: Any, kind: str) -> pa.Array:
    if kind == "VARCHAR":
        return pa.array(column, pa.string())
    numbers = np.ascontiguousarray(column, dtype=np.float64)
    if kind == "DOUBLE":
        return numbers_or_null(numbers)
    missing = np.isnan(numbers)
    whole = np.where(missing, 0.0, numbers)
    if kind == "BOOLEAN":
        return pa.array(whole != 0.0, pa.bool_(), mask=missing)
    return arrow_view(whole.astype(np.int64), missing)


def compute_rows(function: Function, _work: Work, *arguments: Any) -> pa.Array:
    """The answers of a row function that computes in Python."""
    assert function.kernel is not None
    columns = []
    for place, argument in enumerate(map(single_chunk, arguments)):
        missing = is_missing(argument)
        values = np.where(missing, np.nan, numpy_view(argument)).astype(np.float64)
        if place >= len(function.columns):
            parameter = function.parameters[place - len(function.columns)]
            parameter.check(function.name, values, missing)
        columns.append(values)
    absent = np.zeros(len(columns[0]), dtype=np.bool_)
    for place in range(len(function.columns)):
        absent |= is_missing(single_chunk(arguments[place]))
    found = np.ascontiguousarray(function.kernel(*columns), dtype=np.float64)
    return arrow_view(found, null_mask(found) | absent)


def batch_result_type(function: Function) -> str:
    """The SQL type of a batch aggregate's answer."""
    kinds = (f'"{name}" {function.field_types.get(name, "DOUBLE")}' for name in function.fields)
    return f"STRUCT({', '.join(kinds)})"
