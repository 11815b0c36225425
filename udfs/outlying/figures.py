"""The Arrow functions behind `row_flags`, `rolling_flags` and `heaping`.

Imported when functions are registered: the catalogue is read without Arrow.
"""

from typing import Any, Final

import numpy as np
import pyarrow as pa

from midspread.udfs.arithmetic.order_statistics import NORMAL_QUARTILE, median_sorted
from midspread.udfs.binding.arrow_columns import (
    arrow_mask,
    arrow_view,
    is_missing,
    numbers_or_null,
    numpy_view,
    single_chunk,
)
from midspread.udfs.binding.batches import ranked, records
from midspread.udfs.binding.computing import Work, groups_of
from midspread.udfs.declaring import NULL, ParameterError, Values, compiled, helper, null_mask
from midspread.udfs.drivers import Indices, ranked_driver, summary_driver
from midspread.udfs.grouped import Groups, Task, over_portions, row_numbers, run
from midspread.udfs.outlying.grids import HEAPING_FIELDS, heaping_figures, step_of_group
from midspread.udfs.outlying.limits import LIMIT_FIELDS, RULES, limits_of_group
from midspread.udfs.outlying.windows import running_windows_driver

FLOOR_SHARE: Final = 0.5
"""Of the group's own scale of residuals, and of its rounding step: the default floor."""

_WHOLE: Final = {"n_distinct": "BIGINT"}


def _struct_type(fields: tuple[str, ...], types: dict[str, str]) -> str:
    listed = (f"{name} {types.get(name, 'DOUBLE')}" for name in fields)
    return f"STRUCT({', '.join(listed)})"


@helper("_row_limits", _struct_type(LIMIT_FIELDS, {"rule": "VARCHAR"}))
def row_limits(work: Work, lists: Any, rules: Any, ks: Any) -> pa.Array:
    """The limits of each group; rule and k are the same for all of them."""
    groups = groups_of(lists)
    rule, k = single_chunk(rules)[0].as_py(), single_chunk(ks)[0].as_py()
    settings = np.array([[-1.0 if rule is None else RULES.index(rule), k]])
    found = _of_groups(
        work, groups, ranked_driver("row_limits", limits_of_group), settings, len(LIMIT_FIELDS)
    )
    columns: dict[str, Any] = {
        name: np.ascontiguousarray(found[:, i]) for i, name in enumerate(LIMIT_FIELDS)
    }
    empty = groups.lengths == 0
    places = np.where(empty, 0, columns["rule"]).astype(np.int64)
    columns["rule"] = [RULES[place] for place in places.tolist()]
    return records(LIMIT_FIELDS, {"rule": "VARCHAR"}, columns, empty)


@helper("_heaping_figures", _struct_type(HEAPING_FIELDS, _WHOLE))
def heaping_of_lists(work: Work, lists: Any) -> pa.Array:
    """What `heaping_figures` finds in each group."""
    groups = groups_of(lists)
    loop = summary_driver("heaping_figures", heaping_figures)
    found = _of_groups(work, groups, loop, np.empty((0, 1)), len(HEAPING_FIELDS))
    columns = {name: found[:, i] for i, name in enumerate(HEAPING_FIELDS)}
    return records(HEAPING_FIELDS, _WHOLE, columns, groups.lengths == 0)


@helper("_rolling_figures", "STRUCT(median DOUBLE[], scale DOUBLE[])")
def rolling_figures(
    work: Work, lists: Any, position_lists: Any, column: Any, half_width: Any, floor: Any
) -> pa.Array:
    """Each row's window median and scale, in the order the rows came in."""
    values, positions = single_chunk(lists), single_chunk(position_lists)
    offsets: Indices = numpy_view(values.offsets).astype(np.int64)
    missing = is_missing(values.values)
    numbers = np.where(missing, NULL, numpy_view(values.values) + 0.0)
    keys = sort_keys(positions.values)
    order = np.arange(numbers.size)
    centres, deviations = np.full(numbers.size, NULL), np.full(numbers.size, NULL)
    x, absent = np.zeros(numbers.size), np.ones(numbers.size, dtype=np.bool_)
    named = str(single_chunk(column)[0].as_py())
    width = int(single_chunk(half_width)[0].as_py())
    loop = running_windows_driver()

    def work_off(first: int, last: int) -> None:
        start, stop = int(offsets[first]), int(offsets[last])
        here = slice(start, stop)
        place = _in_order(keys[here], offsets[first : last + 1] - start)
        _refuse_repeated(keys[here][place], offsets[first : last + 1] - start, named, positions)
        order[here] = place + start
        x[here], absent[here] = numbers[order[here]], missing[order[here]]
        loop(x, absent, offsets, first, last, width, centres, deviations, work.control.cells)

    over_portions(offsets, work_off, work.control, work.threads)
    given = single_chunk(floor)[0].as_py()
    if given is None:
        floors = _default_floors(work, x, absent, centres, offsets)
    else:
        floors = np.full(len(values), float(given))
    scales = deviations / NORMAL_QUARTILE
    nothing = null_mask(centres)
    scales = np.where(
        np.isnan(scales), scales, np.maximum(scales, np.repeat(floors, np.diff(offsets)))
    )
    scales[nothing] = NULL
    return pa.StructArray.from_arrays(
        [_as_lists(values, back) for back in (_back(centres, order), _back(scales, order))],
        names=["median", "scale"],
        mask=arrow_mask(is_missing(values)),
    )


def _default_floors(
    work: Work, x: Values, absent: Any, centres: Values, offsets: Indices
) -> Values:
    """Half the group's own scale of residuals or half its rounding step, whichever is larger."""
    present = ~absent
    before = np.concatenate((np.zeros(1, np.int64), np.cumsum(present)))
    own = Groups(x[present], before[offsets])
    steps = _of_groups(
        work, own, ranked_driver("rounding_step", step_of_group), np.zeros((1, 1)), 1
    )
    steps = np.where(np.isnan(steps[:, 0]), 0.0, steps[:, 0])
    with np.errstate(invalid="ignore"):
        residuals = np.abs(x - centres)
    judged = present & ~np.isnan(residuals)
    before = np.concatenate((np.zeros(1, np.int64), np.cumsum(judged)))
    own = Groups(residuals[judged], before[offsets])
    loop = summary_driver("middle_residual", middle)
    middles = _of_groups(work, own, loop, np.empty((0, 1)), 1)[:, 0] / NORMAL_QUARTILE
    return FLOOR_SHARE * np.fmax(np.where(np.isnan(middles), 0.0, middles), steps)


@compiled
def middle(x: Values, out: Values) -> None:
    """The median of sorted values."""
    out[0] = median_sorted(x)


def _of_groups(work: Work, groups: Groups, loop: Any, settings: Values, width: int) -> Values:
    """What one loop writes for each group; NULL for groups without values."""
    count = len(groups.offsets) - 1
    out = np.full((count, width), NULL)
    rows = row_numbers(np.ones(count, np.int64))
    run(groups, [Task(loop, settings, 1, 0)], out, rows, work.control, work.threads)
    return out


def sort_keys(positions: pa.Array) -> np.ndarray[Any, Any]:
    """Numbers that sort as the positions do and are equal where they are."""
    kind = positions.type
    if pa.types.is_integer(kind):
        return numpy_view(positions)
    if pa.types.is_floating(kind):
        return numpy_view(positions) + 0.0
    if pa.types.is_temporal(kind) and not pa.types.is_interval(kind):
        whole = pa.int32() if kind.bit_width == 32 else pa.int64()
        return numpy_view(positions.view(whole))
    return ranked("rolling_flags", "position", positions).codes


def _in_order(keys: np.ndarray[Any, Any], bounds: Indices) -> Indices:
    """Where the rows of each group stand once they are ordered by their keys."""
    inside = np.ones(max(keys.size - 1, 0), dtype=np.bool_)
    borders = bounds[1:-1]
    inside[borders[(borders > 0) & (borders < keys.size)] - 1] = False
    if (keys[:-1] <= keys[1:])[inside].all():
        return np.arange(keys.size)
    if bounds.size == 2:
        return np.argsort(keys, kind="stable")
    return np.lexsort((keys, np.repeat(np.arange(bounds.size - 1), np.diff(bounds))))


def _refuse_repeated(
    keys: np.ndarray[Any, Any], bounds: Indices, column: str, positions: pa.Array
) -> None:
    same = keys[1:] == keys[:-1]
    if keys.dtype.kind == "f":
        same |= np.isnan(keys[1:]) & np.isnan(keys[:-1])
    borders = bounds[1:-1]
    same[borders[(borders > 0) & (borders < keys.size)] - 1] = False
    if same.any():
        repeated = keys[1:][same][0]
        flat = positions.values
        at = int(np.flatnonzero(_equal(sort_keys(flat), repeated))[0])
        raise ParameterError(
            f"rolling_flags: each position may occur once in a group, but {column} holds "
            f"{flat[at].as_py()} twice; add a column to by that tells the series apart, or make "
            f"the order unique, for example (SELECT *, row_number() OVER (ORDER BY {column}, …) "
            f"AS place FROM …) with position := 'place'."
        )


def _equal(keys: np.ndarray[Any, Any], wanted: Any) -> Any:
    return np.isnan(keys) if wanted != wanted else keys == wanted


def _back(ordered: Values, order: Indices) -> Values:
    arrival = np.empty_like(ordered)
    arrival[order] = ordered
    return arrival


def _as_lists(like: pa.Array, numbers: Values) -> pa.ListArray:
    offsets = numpy_view(like.offsets).astype(np.int32)
    return pa.ListArray.from_arrays(arrow_view(offsets), numbers_or_null(numbers))
