"""A statistic of each group without each of its units."""

import functools
from collections.abc import Callable
from typing import TYPE_CHECKING, Any, Final

import numpy as np
import numpy.typing as npt

from midspread.udfs.comparison.samples import Samples, read_samples, work_off
from midspread.udfs.compiling import compile_driver
from midspread.udfs.declaring import NULL, Values, declared, helper, null_mask
from midspread.udfs.drivers import DONE, STOP, Indices
from midspread.udfs.grouped import Groups
from midspread.udfs.resampling.evaluating import evaluate
from midspread.udfs.resampling.statistics import Statistic, compiled_for, read_statistic, statistic
from midspread.udfs.resampling.ways_of_drawing import reads_few_ranks
from midspread.udfs.sensitivity.kept_windows import SIGNATURE, means_without
from midspread.udfs.sensitivity.remainders import (
    MIDDLES,
    Remainder,
    changes_from,
    places_of,
    statistic_by_rank,
)

if TYPE_CHECKING:
    from midspread.udfs.binding.computing import Work

FIGURES: Final = ("estimate", "estimate_without", "change", "change_in_spreads")
_MOST_SAMPLES: Final = 1 << 18
_EACH_SIGNATURE: Final = (
    "void(float64[::1], float64[::1], int64[::1], int64[:, ::1], float64[::1], int64, int64, "
    "int64, float64[::1], int64[::1])"
)


def without_samples(
    pooled: Values,
    values: Values,
    starts: Indices,
    homes: Indices,
    parameters: Values,
    smallest: int,
    first: int,
    stop: int,
    out: Values,
    control: Indices,
) -> None:
    """Any statistic of ``pooled[homes[s, 0] : homes[s, 1]]`` without sample s of sorted values."""
    for s in range(first, stop):
        if control[STOP] != 0:
            return
        n = homes[s, 1] - homes[s, 0]
        rest = n - (starts[s + 1] - starts[s])
        if rest >= smallest and rest > 0:
            y = np.empty(rest)
            at = 0
            j = starts[s]
            for i in range(homes[s, 0], homes[s, 1]):
                if j < starts[s + 1] and pooled[i] == values[j]:
                    j += 1
                else:
                    y[at] = pooled[i]
                    at += 1
            out[s] = statistic(y, parameters)
        control[DONE] += n


@helper(
    "_leave_one_out",
    f"STRUCT({', '.join(f'{name} DOUBLE' for name in ('n_left_out', *FIGURES))})[]",
)
def leave_one_out_of(work: "Work", lists: Any, has_rest: Any, text: Any) -> Any:
    """One record for each unit of each group.

    Parameters
    ----------
    lists : list of lists of numbers a group
        The values of each unit.
    has_rest : boolean a group
        Whether the last of these are the values of no unit, which always stay.
    text : text
        The statistic; the same for all groups.
    """
    import pyarrow as pa

    from midspread.udfs.binding.arrow_columns import arrow_view, numbers_or_null, single_chunk

    samples = read_samples(lists)
    count = len(samples.groups) - 1
    found = np.full((int(samples.groups[-1] - samples.groups[0]), len(FIGURES)), NULL)
    begin = int(samples.groups[0])
    if count:
        chosen = read_statistic("leave_one_out", single_chunk(text)[0].as_py())
        rest = np.array([flag is True for flag in single_chunk(has_rest).to_pylist()])
        for start, stop in samples.portions(_MOST_SAMPLES):
            portion = samples.in_order(start, stop, work)
            rows = slice(int(samples.groups[start]) - begin, int(samples.groups[stop]) - begin)
            found[rows] = _figures(portion, rest[start:stop], chosen, work)
    sizes = samples.lengths[begin : int(samples.groups[-1])]
    columns = [arrow_view(sizes.astype(np.float64)).cast(pa.float64())]
    columns += [numbers_or_null(found[:, i]) for i in range(len(FIGURES))]
    records = pa.StructArray.from_arrays(columns, names=["n_left_out", *FIGURES])
    return pa.ListArray.from_arrays(arrow_view((samples.groups - begin).astype(np.int32)), records)


def _figures(
    samples: Samples, has_rest: npt.NDArray[np.bool_], chosen: Statistic, work: "Work"
) -> Values:
    """`FIGURES` of each sample; samples are sorted."""
    pooled = samples.pooled(work)
    ends = samples.starts[samples.groups]
    estimates = evaluate(chosen, Groups(pooled, ends), work)
    own = np.repeat(np.arange(samples.levels.size), samples.levels)
    out = np.full((own.size, len(FIGURES)), NULL)
    out[:, 0] = estimates[own]
    out[:, 1:3] = _without(samples, pooled, ends, estimates, own, chosen, work)
    whole = ends[own + 1] - ends[own]
    spoilt = np.isnan(pooled[np.maximum(ends[1:] - 1, 0)])[own] if pooled.size else own < 0
    # Which of the values are NaN does not matter: a group that holds one has no figures.
    out[spoilt & (whole > samples.lengths), 1:3] = np.nan
    is_unit = np.ones(own.size, dtype=np.bool_)
    is_unit[samples.groups[1:][has_rest] - 1] = False
    spreads = _spreads(out[:, 2], own, is_unit, ends.size - 1, work)[own]
    with np.errstate(all="ignore"):
        relative = np.where(spreads > 0.0, out[:, 2] / spreads, NULL)
    relative[np.isnan(out[:, 2]) & ~null_mask(out[:, 2])] = np.nan
    relative[null_mask(out[:, 2])] = NULL
    out[:, 3] = relative
    return out


def _without(
    samples: Samples,
    pooled: Values,
    ends: Indices,
    estimates: Values,
    own: Indices,
    chosen: Statistic,
    work: "Work",
) -> Values:
    """The statistic without each sample, and the change."""
    control = work.control.cells
    out = np.full((own.size, 2), NULL)
    if reads_few_ranks(chosen):
        found = np.full(own.size, NULL)

        def read(first: int, stop: int) -> None:
            for s in range(first, stop):
                if work.control.stopped:
                    return
                x = pooled[ends[own[s]] : ends[own[s] + 1]]
                gone = samples.values[samples.starts[s] : samples.starts[s + 1]]
                found[s] = statistic_by_rank(chosen, Remainder(x, places_of(x, gone)))

        work_off(read, samples.lengths, work)
    elif chosen.function.name in MIDDLES:
        winsorize = chosen.function.name == MIDDLES[1]
        loop = _middles_loop()

        def average(first: int, stop: int) -> None:
            loop(
                *(pooled, ends, samples.values, samples.starts, samples.groups, estimates),
                *(chosen.parameters[0], winsorize, first, stop, out, control),
            )

        work_off(average, np.diff(ends), work)
        return out
    else:
        found = np.full(own.size, NULL)
        homes = np.ascontiguousarray(np.stack((ends[own], ends[own + 1]), axis=1))
        given = np.array(chosen.parameters, dtype=np.float64)
        loop = _loop_for(chosen.function.name)
        smallest = chosen.function.smallest_n

        def compute(first: int, stop: int) -> None:
            loop(
                *(pooled, samples.values, samples.starts, homes, given, smallest),
                *(first, stop, found, control),
            )

        work_off(compute, homes[:, 1] - homes[:, 0], work)
    out[:, 0] = found
    out[:, 1] = changes_from(estimates[own], found)
    return out


def _spreads(
    changes: Values, own: Indices, is_unit: npt.NDArray[np.bool_], count: int, work: "Work"
) -> Values:
    """mad_scale of the changes of each group's units."""
    known = is_unit & ~null_mask(np.ascontiguousarray(changes))
    offsets = np.zeros(count + 1, dtype=np.int64)
    np.cumsum(np.bincount(own[known], minlength=count), out=offsets[1:])
    scale = Statistic(declared()["mad_scale"])
    return evaluate(scale, Groups(np.ascontiguousarray(changes[known]), offsets), work)


@functools.cache
def _middles_loop() -> Callable[..., None]:
    return compile_driver(means_without, {}, "means_without", SIGNATURE)


@functools.cache
def _loop_for(name: str) -> Callable[..., Any]:
    return compiled_for(without_samples, declared()[name], _EACH_SIGNATURE)
