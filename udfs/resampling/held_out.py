"""Held-out errors: each part of a group is predicted by a statistic of the other parts."""

import functools
import math
from collections.abc import Callable, Iterator, Sequence
from typing import TYPE_CHECKING, Any, Final

import numpy as np
import numpy.typing as npt

from midspread.udfs.arithmetic.sums import compensated_mean
from midspread.udfs.compiling import compile_driver
from midspread.udfs.declaring import NULL, Values, compiled, helper, null_mask
from midspread.udfs.drivers import STOP, Indices
from midspread.udfs.resampling.randomness import below, content_key, stream
from midspread.udfs.resampling.statistics import Statistic, read_statistic

if TYPE_CHECKING:
    from midspread.udfs.binding.computing import Work

Parts = npt.NDArray[np.int32]

FIGURES: Final = (
    "estimate",
    "lowest",
    "highest",
    "mean_absolute_error",
    "root_mean_squared_error",
)
"""What is computed of each group and statistic."""

_AT_ONCE: Final = 1 << 22
"""Values of the rests that are copied out at once."""


@compiled
def deal(x: Values, seed: int, folds: int, parts: Parts) -> None:
    """Deal sorted values into equal parts at random: sizes differ by at most 1.

    Equal values may change places, which changes nothing that is computed from them.
    """
    n = x.size
    for i in range(n):
        parts[i] = i % folds
    key = stream(content_key(x), seed)
    for i in range(n - 1, 0, -1):
        j = below(key, i, i + 1)
        parts[i], parts[j] = parts[j], parts[i]


def _deal_groups(
    values: Values, offsets: Indices, folds: int, seed: int, parts: Parts, control: Indices
) -> None:
    """Deal each group into as many parts as asked for, or as it has values."""
    for g in range(offsets.size - 1):
        if control[STOP] != 0:
            return
        x = values[offsets[g] : offsets[g + 1]]
        deal(x, seed, min(folds, max(x.size, 1)), parts[offsets[g] : offsets[g + 1]])


def _copy_rests(
    values: Values,
    parts: Parts,
    offsets: Indices,
    groups: Indices,
    left_out: Indices,
    starts: Indices,
    rests: Values,
) -> None:
    """For each set: the group's values without those of the part left out, still sorted."""
    for s in range(groups.size):
        at = starts[s]
        for i in range(offsets[groups[s]], offsets[groups[s] + 1]):
            if parts[i] != left_out[s]:
                rests[at] = values[i]
                at += 1


def _misses(
    values: Values,
    parts: Parts,
    offsets: Indices,
    groups: Indices,
    left_out: Indices,
    estimates: Values,
    errors: Values,
) -> None:
    """How far each value left out lies from the estimate without it."""
    for s in range(groups.size):
        for i in range(offsets[groups[s]], offsets[groups[s] + 1]):
            if parts[i] == left_out[s]:
                # Two equal infinities agree.
                met = values[i] == estimates[s]
                errors[i] = 0.0 if met else abs(values[i] - estimates[s])


@compiled
def root_mean_square(x: Values) -> float:
    """The root of the mean square of sorted values that are not negative."""
    largest = x[x.size - 1]
    if largest == 0.0 or math.isinf(largest):
        return largest
    scaled = x / largest
    return largest * math.sqrt(compensated_mean(scaled * scaled, 0, x.size))


def _mean_errors(errors: Values, offsets: Indices, out: Values, control: Indices) -> None:
    """Mean absolute and root mean squared error of each group; the errors are sorted in it."""
    for g in range(offsets.size - 1):
        if control[STOP] != 0:
            return
        x = errors[offsets[g] : offsets[g + 1]]
        if x.size >= 2:
            if math.isnan(x[x.size - 1]):
                out[g, 0] = out[g, 1] = math.nan
            else:
                out[g, 0] = compensated_mean(x, 0, x.size)
                out[g, 1] = root_mean_square(x)


_SIGNATURES: Final = {
    _deal_groups: "void(float64[::1], int64[::1], int64, int64, int32[::1], int64[::1])",
    _copy_rests: (
        "void(float64[::1], int32[::1], int64[::1], int64[::1], int64[::1], int64[::1], "
        "float64[::1])"
    ),
    _misses: (
        "void(float64[::1], int32[::1], int64[::1], int64[::1], int64[::1], float64[::1], "
        "float64[::1])"
    ),
    _mean_errors: "void(float64[::1], int64[::1], float64[:, ::1], int64[::1])",
}


@functools.cache
def _loop(template: Callable[..., None]) -> Callable[..., None]:
    name = f"held_out{template.__name__}"
    return compile_driver(template, {}, name, _SIGNATURES[template])


@helper(
    "_held_out_errors",
    "STRUCT(statistic VARCHAR, n BIGINT, folds BIGINT, estimate DOUBLE, lowest DOUBLE, "
    "highest DOUBLE, mean_absolute_error DOUBLE, root_mean_squared_error DOUBLE)[]",
)
def held_out_errors_of(
    work: "Work", lists: Any, given: Any, texts: Any, folds: Any, seeds: Any
) -> Any:
    """One record for each statistic of each group.

    Parameters
    ----------
    lists : list of numbers a group
        The values.
    given : list of whole numbers a group, or NULL
        The fold of each value where rows belong to units.
    texts : list of text
        The statistics; the same for all groups, as are folds and seeds.
    """
    import pyarrow as pa

    from midspread.udfs.binding.arrow_columns import (
        arrow_view,
        numbers_or_null,
        numpy_view,
        single_chunk,
    )
    from midspread.udfs.binding.computing import groups_of

    groups = groups_of(lists)
    size = groups.offsets.size - 1
    names: list[str] = single_chunk(texts)[0].as_py() if size else []
    statistics = [read_statistic("held_out_errors", name) for name in names]
    given = single_chunk(given)
    fixed = None
    if not pa.types.is_null(given.type) and given.null_count < len(given):
        fixed = numpy_view(given.values).astype(np.int32)
    offsets = groups.offsets - groups.offsets[0]
    values = groups.values[groups.offsets[0] : groups.offsets[-1]] + 0.0
    number = int(single_chunk(folds)[0].as_py()) if size else 2
    seed = int(single_chunk(seeds)[0].as_py()) if size else 0
    parts = _sort_and_deal(values, offsets, fixed, number, seed, work)
    used, figures = held_out_figures(values, parts, offsets, statistics, work)
    repeated = len(names)
    columns = {
        "statistic": pa.array([name.strip() for name in names] * size, pa.string()),
        "n": arrow_view(np.repeat(np.diff(offsets), repeated)),
        "folds": arrow_view(np.repeat(used, repeated)),
    }
    for place, name in enumerate(FIGURES):
        columns[name] = numbers_or_null(figures[:, :, place].reshape(-1))
    records = pa.StructArray.from_arrays(list(columns.values()), names=list(columns))
    return pa.ListArray.from_arrays(
        arrow_view(np.arange(size + 1, dtype=np.int32) * repeated), records
    )


def _sort_and_deal(
    values: Values, offsets: Indices, fixed: Parts | None, folds: int, seed: int, work: "Work"
) -> Parts:
    """Sort each group's values in place; the part of each, from 0 up."""
    parts = np.zeros(values.size, dtype=np.int32)
    for start, stop in zip(offsets[:-1].tolist(), offsets[1:].tolist(), strict=True):
        _raise_if_stopped(work)
        if fixed is None:
            values[start:stop].sort()
        else:
            order = np.lexsort((fixed[start:stop], values[start:stop]))
            values[start:stop] = values[start:stop][order]
            parts[start:stop] = fixed[start:stop][order]
    if fixed is None:
        # All NaN alike, so that the key does not depend on what computed them.
        values[np.isnan(values)] = np.nan
        _loop(_deal_groups)(values, offsets, folds, seed, parts, work.control.cells)
        _raise_if_stopped(work)
    return parts


def held_out_figures(
    values: Values, parts: Parts, offsets: Indices, statistics: Sequence[Statistic], work: "Work"
) -> tuple[Indices, Values]:
    """The number of parts of each group, and `FIGURES` of each group and statistic.

    Parameters
    ----------
    values, parts : ndarray
        Sorted values of each group and the part each belongs to.
    offsets : ndarray of int64
        Group i holds rows ``offsets[i] : offsets[i + 1]``.
    """
    from midspread.udfs.grouped import Groups
    from midspread.udfs.resampling.evaluating import evaluate

    size = offsets.size - 1
    groups, left_out, counts = _sets(parts, offsets)
    used = np.bincount(groups, minlength=size).astype(np.int64)
    lengths = np.diff(offsets)
    out = np.full((size, len(statistics), len(FIGURES)), NULL)
    estimates = np.full((groups.size, len(statistics)), NULL)
    for first, stop in _portions(lengths[groups] - counts):
        _raise_if_stopped(work)
        own = groups[first:stop]
        starts = np.zeros(stop - first + 1, dtype=np.int64)
        np.cumsum(lengths[own] - counts[first:stop], out=starts[1:])
        rests = np.empty(int(starts[-1]))
        _loop(_copy_rests)(values, parts, offsets, own, left_out[first:stop], starts, rests)
        for place, statistic in enumerate(statistics):
            estimates[first:stop, place] = evaluate(statistic, Groups(rests, starts), work)
    enough = used >= 2
    first_sets = np.zeros(size + 1, dtype=np.int64)
    np.cumsum(used, out=first_sets[1:])
    for place, statistic in enumerate(statistics):
        out[:, place, 0] = evaluate(statistic, Groups(values, offsets), work)
        own_estimates = np.ascontiguousarray(estimates[:, place])
        complete = enough & ~_any_of(null_mask(own_estimates), groups, size)
        if not complete.any():
            continue
        errors = np.empty(values.size)
        _loop(_misses)(values, parts, offsets, groups, left_out, own_estimates, errors)
        for start, stop in zip(offsets[:-1].tolist(), offsets[1:].tolist(), strict=True):
            errors[start:stop].sort()
        means = np.full((size, 2), NULL)
        _loop(_mean_errors)(errors, offsets, means, work.control.cells)
        _raise_if_stopped(work)
        nonempty = np.flatnonzero(used)
        figures = np.full((size, 4), NULL)
        figures[nonempty, 0] = np.minimum.reduceat(own_estimates, first_sets[nonempty])
        figures[nonempty, 1] = np.maximum.reduceat(own_estimates, first_sets[nonempty])
        figures[:, 2:] = means
        out[complete, place, 1:] = figures[complete]
    return used, out


def _sets(parts: Parts, offsets: Indices) -> tuple[Indices, Indices, Indices]:
    """Every part that holds a value: its group, its number and its size, group after group."""
    groups = np.repeat(np.arange(offsets.size - 1), np.diff(offsets))
    width = int(parts.max(initial=0)) + 1
    found, counts = np.unique(groups * width + parts, return_counts=True)
    return found // width, found % width, counts.astype(np.int64)


def _portions(sizes: Indices) -> Iterator[tuple[int, int]]:
    """Runs of sets that hold about `_AT_ONCE` values together."""
    ends = np.cumsum(sizes)
    first = 0
    while first < sizes.size:
        before = int(ends[first - 1]) if first else 0
        stop = max(int(np.searchsorted(ends, before + _AT_ONCE, side="right")), first + 1)
        yield first, stop
        first = stop


def _any_of(flags: npt.NDArray[np.bool_], groups: Indices, size: int) -> npt.NDArray[np.bool_]:
    """Whether any set of a group is flagged."""
    return np.bincount(groups[flags], minlength=size) > 0


def _raise_if_stopped(work: "Work") -> None:
    from midspread.udfs.grouped import Stopped

    if work.control.stopped:
        raise Stopped("stopped on request")
