"""Drawn values of a statistic: which way of drawing serves which statistic, and the draws."""

import functools
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final

import numpy as np
import numpy.typing as npt

from midspread.udfs.compiling import compile_driver
from midspread.udfs.declaring import NULL, Function, Values, compiled, declared, null_mask
from midspread.udfs.drivers import DONE, Indices
from midspread.udfs.grouped import Groups, row_numbers
from midspread.udfs.resampling import drawing_loops, leave_one_out
from midspread.udfs.resampling.middles_left_out import middles_left_out
from midspread.udfs.resampling.samples import Samples, keys_of, samples_of, statistic_of
from midspread.udfs.resampling.statistics import Statistic, compiled_for
from midspread.udfs.resampling.working import work_off

if TYPE_CHECKING:
    from midspread.udfs.binding.computing import Work

MIDDLES: Final = {
    "trimmed_mean": drawing_loops.TRIMMED_MEAN,
    "winsorized_mean": drawing_loops.WINSORIZED_MEAN,
    "winsorized_sd": drawing_loops.DEVIATION,
    "trimmed_mean_se": drawing_loops.ERROR,
}
"""Drawn from the order statistics that bound what is kept, or by counts."""
FEW_RANKS: Final = ("quantile_hf", "trimean", "iqr_scale", "bowley_skew", "octile_skew")
"""Read a few order statistics, which are drawn alone; so do medians."""

_LARGE: Final = 1 << 26
"""A group with so many draws of single values is shared out to the threads."""
_PIECE: Final = 1 << 25
_PIECES: Final = 32
"""Shared out in no more pieces than this: each makes the values ready once."""
_PORTION_VALUES: Final = 1 << 20
_PORTION_DRAWS: Final = 1 << 18
_HUGE: Final = 2.0**500
_TINY: Final = 2.0**-450
_ERROR_OF: Final = "trimmed_mean_se"


@dataclass(frozen=True)
class Drawn:
    """Draws of some groups.

    Attributes
    ----------
    samples : Samples
        The groups.
    draws : ndarray of float64, shape (groups, resamples)
        In the order of the resamples; `NULL` where a resample has no value.
    errors : ndarray of float64, of the same shape, or with no rows
        The standard error of each draw.
    """

    samples: Samples
    draws: Values
    errors: Values


def has_error(statistic: Statistic) -> bool:
    """Whether the statistic has a standard error of its own."""
    return statistic.function.name == "trimmed_mean" and statistic.parameters[0] != 0.5


def errors_of(statistic: Statistic, samples: Samples) -> Values:
    """The standard error of a trimmed mean, at its own share."""
    function = declared()[_ERROR_OF]
    error = Statistic(function, statistic.parameters)
    return statistic_of(error, samples.values, samples.others, samples.starts, samples.lengths)


def in_portions(
    groups: Groups,
    members: Indices,
    statistic: Statistic,
    work: "Work",
    use: Callable[[Indices, Samples], None],
) -> None:
    """Hand the chosen groups of two values and more, made ready, to a function of portions."""
    lengths = groups.lengths[members]
    members, lengths = members[lengths >= 2], lengths[lengths >= 2]

    def portion(chosen: Indices) -> None:
        use(chosen, samples_of(groups, chosen, statistic))

    pieces = (
        functools.partial(portion, members[start:stop]) for start, stop in _portions(lengths, 1)
    )
    work_off(pieces, work.control, work.threads)


def group_draws(
    groups: Groups, statistic: Statistic, resamples: int, seeds: Values, work: "Work"
) -> Values:
    """The drawn values of a statistic, in the order of the resamples.

    Parameters
    ----------
    groups : Groups
        Values of each group in any order; for a statistic of pairs (y, x) with the x as weights.
    statistic : Statistic
        As `read_statistic` gives it.
    resamples : int
        How many samples of its own size are drawn from each group, with replacement.
    seeds : ndarray of float64, shape (groups,)
        Whole numbers from 0 up.
    work : Work
        Threads, progress and the request to stop.

    Returns
    -------
    ndarray of float64, shape (groups, resamples)
        `NULL` where a resample has no value, and for groups of less than two values; NaN for
        groups that hold NaN. Same values and seed, same draws: whatever the order of the values,
        the other groups, the threads; and the first draws are the same for any resamples.
    """
    out = np.full((len(groups.offsets) - 1, resamples), NULL)

    def keep(members: Indices, drawn: Drawn) -> None:
        out[members] = drawn.draws

    draw_all(groups, np.arange(out.shape[0]), statistic, resamples, seeds, work, keep)
    return out


def draw_all(
    groups: Groups,
    members: Indices,
    statistic: Statistic,
    resamples: int,
    seeds: Values,
    work: "Work",
    use: Callable[[Indices, Drawn], None],
    *,
    with_errors: bool = False,
    further: int = 0,
) -> None:
    """Draw for the chosen groups, portion by portion, and hand each portion to a function.

    Parameters
    ----------
    groups, statistic, resamples, seeds, work
        As for `group_draws`.
    members : ndarray of int64
        The groups to draw for; those with less than two values are left out.
    use : callable
        Given the members of a portion and what was drawn; called from several threads.
    with_errors : bool
        Whether the draws' standard errors are wanted.
    further : int
        Work still to come for each group, counted in resamples, for the progress.
    """
    lengths = groups.lengths[members]
    members, lengths = members[lengths >= 2], lengths[lengths >= 2]
    large = lengths * resamples >= _LARGE
    steps = resamples + further

    def portion(chosen: Indices) -> None:
        samples = samples_of(groups, chosen, statistic)
        drawn = _prepared(samples, resamples, with_errors)
        keys = keys_of(samples, seeds[chosen])
        _draw(statistic, drawn, keys, 0, resamples, steps, work)
        if not work.control.stopped:
            use(chosen, drawn)

    small = members[~large]
    pieces = (
        functools.partial(portion, small[start:stop])
        for start, stop in _portions(lengths[~large], resamples)
    )
    work_off(pieces, work.control, work.threads)
    for group in members[large]:
        chosen = np.array([group])
        samples = samples_of(groups, chosen, statistic)
        drawn = _prepared(samples, resamples, with_errors)
        keys = keys_of(samples, seeds[chosen])
        at_once = max(_PIECE // int(samples.lengths[0]), -(-resamples // _PIECES))
        shares = (
            functools.partial(
                _draw, statistic, drawn, keys, first, min(first + at_once, resamples), steps, work
            )
            for first in range(0, resamples, at_once)
        )
        work_off(shares, work.control, work.threads)
        use(chosen, drawn)


def _portions(lengths: Indices, resamples: int) -> Iterator[tuple[int, int]]:
    """Runs of groups that make up a portion."""
    start = 0
    ends = np.cumsum(lengths)
    at_most = max(_PORTION_DRAWS // resamples, 1)
    while start < lengths.size:
        before = int(ends[start - 1]) if start else 0
        stop = int(np.searchsorted(ends, before + _PORTION_VALUES, side="right"))
        stop = min(max(stop, start + 1), start + at_most, lengths.size)
        yield start, stop
        start = stop


def _prepared(samples: Samples, resamples: int, with_errors: bool) -> Drawn:
    draws = np.full((samples.size, resamples), NULL)
    draws[~samples.clean] = np.nan
    errors = np.full((samples.size if with_errors else 0, resamples), NULL)
    return Drawn(samples, draws, errors)


def _draw(
    statistic: Statistic,
    drawn: Drawn,
    keys: npt.NDArray[np.uint64],
    first: int,
    stop: int,
    steps: int,
    work: "Work",
) -> None:
    """Draw resamples first to stop of every group that can be resampled."""
    samples, function = drawn.samples, statistic.function
    rows = np.flatnonzero(samples.clean & (samples.lengths >= function.smallest_n))
    parameters = np.array(statistic.parameters, dtype=np.float64)
    control = work.control.cells

    def run(loop: Callable[..., Any], chosen: Indices, out: Values, *more: Any) -> None:
        if chosen.size:
            loop(
                *((samples.others,) if samples.others.size else ()),
                samples.values,
                samples.starts,
                samples.lengths,
                chosen,
                keys,
                parameters,
                first,
                stop,
                steps,
                out,
                control,
                *more,
            )

    if reads_few_ranks(statistic):
        read = ranks_read(statistic, samples.lengths)
        loop = _loop_for(function.name, drawing_loops.of_drawn_ranks, drawing_loops.RANKS_SIGNATURE)
        run(loop, rows, drawn.draws, *read)
        return
    if function.name in MIDDLES:
        plain = _is_plain(samples)[rows]
        if plain.any():
            more = (MIDDLES[function.name], samples.estimates, drawn.errors)
            loop = _loop(drawing_loops.of_middles, drawing_loops.MIDDLES_SIGNATURE)
            run(loop, rows[plain], drawn.draws, *more)
        rows = rows[~plain]
        if rows.size and drawn.errors.size:
            run(_resamples_loop(declared()[_ERROR_OF]), rows, drawn.errors)
    if rows.size:
        run(_resamples_loop(function), rows, drawn.draws)


def _is_plain(samples: Samples) -> npt.NDArray[np.bool_]:
    """Which groups' values are finite, and neither sums nor squares leave a double's range."""
    low = samples.values[samples.starts]
    high = samples.values[samples.starts + samples.lengths - 1]
    with np.errstate(invalid="ignore", over="ignore"):
        spread = high - low
        return np.isfinite(spread) & (spread < _HUGE) & ((spread > _TINY) | (spread == 0.0))


def reads_few_ranks(statistic: Statistic) -> bool:
    """Whether the statistic depends on a handful of order statistics."""
    name = statistic.function.name
    return name in FEW_RANKS or (name in MIDDLES and statistic.parameters[0] == 0.5)


def left_out_work(statistic: Statistic) -> int:
    """What leaving out values costs beside resampling, counted in resamples."""
    if reads_few_ranks(statistic) or statistic.function.name in MIDDLES:
        return 0
    return leave_one_out.NODES


def _marked(size: int, chosen: Indices) -> npt.NDArray[np.bool_]:
    marks = np.zeros(size, dtype=np.bool_)
    marks[chosen] = True
    return marks


class _Recorder:
    """Stands for n sorted values and notes which of them a kernel reads."""

    def __init__(self, n: int) -> None:
        self.size = n
        self.read: set[int] = set()

    def __getitem__(self, place: int) -> float:
        self.read.add(int(place) % self.size)
        return float(place)


def ranks_read(statistic: Statistic, lengths: Indices) -> tuple[Indices, Indices]:
    """The ranks, from 1, that the statistic reads of each group, and where each group's start."""
    sizes, place = np.unique(lengths, return_inverse=True)
    known = [_ranks_of(statistic, n) for n in sizes.tolist()]
    read = [known[i] for i in place.tolist()]
    return np.concatenate(read), row_numbers(np.array([ranks.size for ranks in read]))


def _ranks_of(statistic: Statistic, n: int) -> Indices:
    if n < 1:
        return np.empty(0, dtype=np.int64)
    recorder = _Recorder(n)
    assert statistic.function.kernel is not None
    statistic.function.kernel(recorder, *statistic.parameters)
    return np.array(sorted(recorder.read), dtype=np.int64) + 1


def left_out_figures(
    statistic: Statistic, samples: Samples, exact: int, steps: int, further: int, work: "Work"
) -> npt.NDArray[np.float64]:
    """The jackknife's figures of each group, one row each: see `leave_one_out`.

    Parameters
    ----------
    exact : int
        Up to so many values each is left out in turn where there is no closed form.
    steps, further : int
        All of a group's work, and how much of it this is, for the progress.
    """
    function = statistic.function
    out = np.full((samples.size, 3), NULL)
    rows = np.flatnonzero(
        samples.clean & (samples.lengths > function.smallest_n) & ~null_mask(samples.estimates)
    )
    out[~samples.clean] = np.nan
    parameters = np.array(statistic.parameters, dtype=np.float64)

    def run(loop: Callable[..., Any], chosen: Indices, *more: Any) -> None:
        if chosen.size:
            loop(
                *((samples.others,) if samples.others.size else ()),
                samples.values,
                samples.starts,
                samples.lengths,
                chosen,
                parameters,
                samples.estimates,
                exact,
                steps,
                further,
                out,
                work.control.cells,
                *more,
            )

    if reads_few_ranks(statistic):
        loop = _loop_for(function.name, leave_one_out.left_out_ranks, leave_one_out.RANKS_SIGNATURE)
        run(loop, rows, *ranks_read(statistic, samples.lengths - 1))
        return out
    if function.name in MIDDLES:
        plain = _is_plain(samples)[rows]
        if plain.any():
            chosen = rows[plain]
            lengths = samples.lengths[chosen]
            values = samples.values
            if chosen.size < samples.size:
                values = values[np.repeat(_marked(samples.size, chosen), samples.lengths)]
            out[chosen] = middles_left_out(
                values, lengths, statistic.parameters[0], MIDDLES[function.name]
            )
            work.control.cells[DONE] += int((lengths * further // steps).sum())
        rows = rows[~plain]
    if rows.size:
        run(_left_out_loop(function), rows)
    return out


def _resamples_loop(function: Function) -> Callable[..., Any]:
    if len(function.columns) == 2:
        return _loop_for(
            function.name, drawing_loops.of_resampled_pairs, drawing_loops.PAIRS_SIGNATURE
        )
    return _loop_for(function.name, drawing_loops.of_resamples, drawing_loops.SIGNATURE)


def _left_out_loop(function: Function) -> Callable[..., Any]:
    if len(function.columns) == 2:
        return _loop_for(function.name, leave_one_out.left_out_pairs, leave_one_out.PAIRS_SIGNATURE)
    return _loop_for(function.name, leave_one_out.left_out, leave_one_out.SIGNATURE)


@functools.cache
def _loop_for(name: str, template: Callable[..., Any], signature: str) -> Callable[..., Any]:
    """A loop compiled around the kernel of a function."""
    function = declared()[name]
    if len(function.columns) == 1:
        return compiled_for(template, function, signature)
    assert function.kernel is not None
    adapter = _PAIR_ADAPTERS[len(function.parameters)]
    replacements = {"statistic": adapter, "kernel": function.kernel}
    return compile_driver(template, replacements, f"{template.__name__}_{name}", signature)


@functools.cache
def _loop(template: Callable[..., Any], signature: str) -> Callable[..., Any]:
    """A loop that needs no kernel."""
    return compile_driver(template, {}, template.__name__, signature)


def kernel(*_arguments: Any) -> float:
    """Stands for the kernel of a statistic of pairs."""
    raise TypeError("replaced when a loop is compiled")


@compiled
def _statistic_yx0(y: Values, x: Values, _p: Values) -> float:
    return kernel(y, x)


@compiled
def _statistic_yx1(y: Values, x: Values, p: Values) -> float:
    return kernel(y, x, p[0])


@compiled
def _statistic_yx2(y: Values, x: Values, p: Values) -> float:
    return kernel(y, x, p[0], p[1])


_PAIR_ADAPTERS: Final = (_statistic_yx0, _statistic_yx1, _statistic_yx2)
