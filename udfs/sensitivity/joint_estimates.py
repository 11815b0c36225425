"""Location estimates with their standard errors, and those of their differences from the mean."""

import functools
from collections.abc import Callable, Iterator
from typing import TYPE_CHECKING, Any, Final

import numpy as np
import numpy.typing as npt

from midspread.udfs.compiling import compile_driver
from midspread.udfs.declaring import NULL, Values, declared, helper
from midspread.udfs.drivers import STOP, Indices, driver
from midspread.udfs.grouped import Groups, Stopped, Task, row_numbers, run
from midspread.udfs.resampling import drawing_loops
from midspread.udfs.resampling.held_out import Parts, deal
from midspread.udfs.resampling.samples import Samples, keys_of, samples_of
from midspread.udfs.resampling.statistics import Statistic, compiled_for, read_statistic
from midspread.udfs.resampling.working import work_off

if TYPE_CHECKING:
    from midspread.udfs.binding.computing import Work

ESTIMATORS: Final = {
    "mean": "mean",
    "trimmed_mean_10": "trimmed_mean(0.1)",
    "trimmed_mean_20": "trimmed_mean(0.2)",
    "winsorized_mean_20": "winsorized_mean(0.2)",
    "median": "median",
    "trimean": "trimean",
    "huber_location": "huber_location",
    "bisquare_location": "bisquare_location",
    "hodges_lehmann": "hodges_lehmann",
}
"""Names in the answer, and what they stand for; the first is what the others are compared with."""
FIGURES: Final = ("estimate", "se", "lower", "upper", "difference", "difference_in_se")

BOOTSTRAPPED: Final = 10_000
"""Groups of at most so many values are resampled; larger ones are dealt into parts."""
PARTS: Final = 200
_DEAL_SIGNATURE: Final = (
    "void(float64[::1], int64, int32[::1], int64[::1], float64[::1], int64[::1])"
)
_PORTION_VALUES: Final = 1 << 17
_PORTION_DRAWS: Final = 1 << 17
_FAR: Final = 8.0
"""Differences are taken from the middle where it is more than so many spreads from zero."""


def deal_into_parts(
    x: Values, seed: int, parts: Parts, starts: Indices, dealt: Values, control: Indices
) -> None:
    """Deal sorted values into equal parts at random and write these out, each still sorted."""
    folds = starts.size - 1
    deal(x, seed, folds, parts)
    if control[STOP] != 0:
        return
    at = np.zeros(folds + 1, np.int64)
    for i in range(x.size):
        at[parts[i] + 1] += 1
    for k in range(folds):
        at[k + 1] += at[k]
        starts[k + 1] = at[k + 1]
    starts[0] = 0
    for i in range(x.size):
        dealt[at[parts[i]]] = x[i]
        at[parts[i]] += 1


@helper(
    "_location_estimates",
    "STRUCT(estimator VARCHAR, n BIGINT, "
    + ", ".join(f"{name} DOUBLE" for name in FIGURES)
    + ")[]",
)
def location_estimates_of(
    work: "Work", lists: Any, confidence: Any, resamples: Any, seeds: Any
) -> Any:
    """One record for each estimator of each group.

    Parameters
    ----------
    lists : list of numbers a group
        The values.
    confidence, resamples, seeds : numbers
        The same for all groups.
    """
    import pyarrow as pa

    from midspread.udfs.binding.arrow_columns import arrow_view, numbers_or_null, single_chunk
    from midspread.udfs.binding.computing import groups_of

    groups = groups_of(lists)
    size = len(groups.offsets) - 1
    found = np.empty((0, len(ESTIMATORS), len(FIGURES)))
    if size:
        level, draws, seed = (
            float(single_chunk(given)[0].as_py()) for given in (confidence, resamples, seeds)
        )
        found = joint_figures(groups, level, int(draws), int(seed), work)
    columns = {
        "estimator": pa.array([*ESTIMATORS] * size, pa.string()),
        "n": arrow_view(np.repeat(groups.lengths, len(ESTIMATORS))),
    }
    for place, name in enumerate(FIGURES):
        columns[name] = numbers_or_null(found[:, :, place].reshape(-1))
    records = pa.StructArray.from_arrays(list(columns.values()), names=list(columns))
    offsets = np.arange(size + 1, dtype=np.int32) * len(ESTIMATORS)
    return pa.ListArray.from_arrays(arrow_view(offsets), records)


def joint_figures(
    groups: Groups,
    confidence: float,
    resamples: int,
    seed: int,
    work: "Work",
    bootstrapped: int = BOOTSTRAPPED,
) -> Values:
    """`FIGURES` of each group and estimator.

    Parameters
    ----------
    groups : Groups
        Values of each group in any order.
    bootstrapped : int
        Groups of at most so many values are resampled, larger ones dealt into parts.
    """
    lengths = groups.lengths
    # One more: the standard error of the difference.
    found = np.full((lengths.size, len(ESTIMATORS), len(FIGURES) + 1), NULL)
    found[:, :, 0] = _estimates(groups, work)
    with np.errstate(invalid="ignore"):
        found[:, :, 4] = found[:, :, 0] - found[:, :1, 0]
    found[lengths == 0, :, 4] = NULL
    large = (lengths > bootstrapped) & (lengths >= 2 * PARTS)
    for members, samples in _portions(groups, np.flatnonzero((lengths >= 2) & ~large), resamples):
        middles = _from_far_middles(samples)
        draws = _resampled(samples, keys_of(samples, np.full(samples.size, seed)), resamples, work)
        _fill(found, members, draws, 1.0, samples.lengths - 1, confidence)
        _near_differences(found, members, samples, middles, work)
    for group in np.flatnonzero(large):
        members = np.array([group])
        samples = samples_of(groups, members, _statistics()[0])
        middles = _from_far_middles(samples)
        draws = _of_parts(samples, seed, work)
        degrees = np.array([PARTS - 1], dtype=np.int64)
        _fill(found, members, draws, PARTS**-0.5, degrees, confidence)
        _near_differences(found, members, samples, middles, work)
    return found


def _estimates(groups: Groups, work: "Work") -> Values:
    """Every estimator of every group, over one sort."""
    count = len(groups.offsets) - 1
    out = np.full((count, len(ESTIMATORS)), NULL)
    tasks = []
    for column, chosen in enumerate(_statistics()):
        given = np.array(chosen.parameters, dtype=np.float64).reshape(-1, 1)
        parameters = np.ascontiguousarray(np.repeat(given, max(count, 1), axis=1))
        tasks.append(Task(driver(chosen.function), parameters, chosen.function.smallest_n, column))
    run(groups, tasks, out, row_numbers(np.ones(count, np.int64)), work.control, work.threads)
    return out


def _portions(
    groups: Groups, members: Indices, resamples: int
) -> Iterator[tuple[Indices, Samples]]:
    """The chosen groups, some at a time, sorted."""
    ends = np.cumsum(groups.lengths[members])
    at_most = max(_PORTION_DRAWS // resamples, 1)
    start = 0
    while start < members.size:
        before = int(ends[start - 1]) if start else 0
        stop = int(np.searchsorted(ends, before + _PORTION_VALUES, side="right"))
        stop = min(max(stop, start + 1), start + at_most)
        chosen = members[start:stop]
        yield chosen, samples_of(groups, chosen, _statistics()[0])
        start = stop


def _from_far_middles(samples: Samples) -> Values:
    """Measure each group's values from its median where that is far from zero, in place.

    Differences between estimates then keep their digits; which are drawn stays the same, as the
    keys are made of the differences from a value of the group itself.
    """
    middles = np.zeros(samples.size)
    for r in np.flatnonzero(samples.clean).tolist():
        x = samples.values[int(samples.starts[r]) :][: int(samples.lengths[r])]
        low, middle, high = x[x.size // 4], x[x.size // 2], x[3 * x.size // 4]
        with np.errstate(invalid="ignore", over="ignore"):
            far = abs(middle) > _FAR * (high - low)
        if far and np.isfinite(middle):
            middles[r] = middle
            x -= middle
    return middles


def _near_differences(
    found: Values, members: Indices, samples: Samples, middles: Values, work: "Work"
) -> None:
    """Take the differences of groups whose middle was far from zero from values near zero."""
    moved = middles != 0.0
    if moved.any():
        offsets = np.append(samples.starts, samples.values.size)
        near = _estimates(Groups(samples.values, offsets), work)[moved]
        with np.errstate(invalid="ignore"):
            found[members[moved], :, 4] = near - near[:, :1]
        _in_standard_errors(found, members)


def _resampled(
    samples: Samples, keys: npt.NDArray[np.uint64], resamples: int, work: "Work"
) -> Values:
    """Every estimator of the same resamples: shape (estimators, groups, resamples)."""
    draws = np.full((len(ESTIMATORS), samples.size, resamples), np.nan)
    rows = np.flatnonzero(samples.clean)
    steps = resamples * len(ESTIMATORS)

    def draw(place: int) -> None:
        chosen = _statistics()[place]
        _drawing_loop(chosen.function.name)(
            *(samples.values, samples.starts, samples.lengths, rows, keys),
            np.array(chosen.parameters, dtype=np.float64),
            *(0, resamples, steps, draws[place], work.control.cells),
        )

    if rows.size:
        pieces = (functools.partial(draw, place) for place in range(len(ESTIMATORS)))
        work_off(pieces, work.control, work.threads)
    return draws


def _of_parts(samples: Samples, seed: int, work: "Work") -> Values:
    """Every estimator of each part of one group: shape (estimators, 1, parts)."""
    x = samples.values
    if not samples.clean[0]:
        return np.full((len(ESTIMATORS), 1, PARTS), np.nan)
    parts = np.empty(x.size, dtype=np.int32)
    starts = np.empty(PARTS + 1, dtype=np.int64)
    dealt = np.empty_like(x)
    _dealing_loop()(x, seed, parts, starts, dealt, work.control.cells)
    if work.control.stopped:
        raise Stopped("stopped on request")
    return np.ascontiguousarray(_estimates(Groups(dealt, starts), work).T)[:, np.newaxis, :]


def _fill(
    found: Values,
    members: Indices,
    draws: Values,
    factor: float,
    degrees: Indices,
    confidence: float,
) -> None:
    """Write standard errors, intervals and differences, from estimates of resamples or parts.

    factor times their standard deviation is the standard error.
    """
    from scipy.special import stdtrit

    errors = factor * _deviations(draws)
    reach = stdtrit(degrees.astype(np.float64), 0.5 + confidence / 2)[:, np.newaxis] * errors.T
    with np.errstate(invalid="ignore"):
        apart = factor * _deviations(draws - draws[:1])
        found[members, :, 1] = errors.T
        found[members, :, 2] = found[members, :, 0] - reach
        found[members, :, 3] = found[members, :, 0] + reach
    found[members, :, 6] = apart.T
    _in_standard_errors(found, members)


def _in_standard_errors(found: Values, members: Indices) -> None:
    """Differences divided by their own standard errors; `NULL` for the mean itself."""
    with np.errstate(invalid="ignore", divide="ignore"):
        ratio = found[members, :, 4] / found[members, :, 6]
    ratio[found[members, :, 6] == 0.0] = NULL
    ratio[:, 0] = NULL
    found[members, :, 5] = ratio


def _deviations(draws: Values) -> Values:
    """Standard deviation over the last axis, exactly 0 where all are equal."""
    if draws.shape[-1] < 2:
        return np.full(draws.shape[:-1], NULL)
    with np.errstate(invalid="ignore", over="ignore"):
        spread = np.std(draws, axis=-1, ddof=1)
        return np.where(draws.max(axis=-1) == draws.min(axis=-1), 0.0, spread)


@functools.cache
def _statistics() -> tuple[Statistic, ...]:
    return tuple(read_statistic("location_estimates", text) for text in ESTIMATORS.values())


@functools.cache
def _drawing_loop(name: str) -> Callable[..., Any]:
    return compiled_for(drawing_loops.of_resamples, declared()[name], drawing_loops.SIGNATURE)


@functools.cache
def _dealing_loop() -> Callable[..., Any]:
    return compile_driver(deal_into_parts, {}, "deal_into_parts", _DEAL_SIGNATURE)
