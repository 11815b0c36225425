"""Drawn values of a statistic: groups and resamples shared out to the loops that draw."""

import functools
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final

import numpy as np
import numpy.typing as npt

from midspread.udfs.compiling import compile_driver
from midspread.udfs.declaring import NULL, Function, Values, declared
from midspread.udfs.drivers import Indices
from midspread.udfs.grouped import Groups
from midspread.udfs.resampling import drawing_loops, middles
from midspread.udfs.resampling.samples import Samples, keys_of, samples_of, statistic_of
from midspread.udfs.resampling.statistics import Statistic
from midspread.udfs.resampling.ways_of_drawing import (
    MIDDLES,
    is_plain,
    loop_for,
    ranks_read,
    reads_few_ranks,
)
from midspread.udfs.resampling.working import work_off

if TYPE_CHECKING:
    from midspread.udfs.binding.computing import Work

_LARGE: Final = 1 << 26
"""A group with so many draws of single values is shared out to the threads."""
_PIECE: Final = 1 << 25
_PIECES: Final = 4
"""No more pieces for each thread than this: every piece makes the values ready anew."""
_PORTION_VALUES: Final = 1 << 20
_PORTION_DRAWS: Final = 1 << 18
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
        at_once = max(_PIECE // int(samples.lengths[0]), -(-resamples // (_PIECES * work.threads)))
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
        loop = loop_for(function.name, drawing_loops.of_drawn_ranks, drawing_loops.RANKS_SIGNATURE)
        run(loop, rows, drawn.draws, *read)
        return
    if function.name in MIDDLES:
        plain = is_plain(samples)[rows]
        few = samples.lengths[rows] < middles.COUNTED
        squares = bool(drawn.errors.size) or MIDDLES[function.name] >= middles.DEVIATION
        for chosen, counted in ((plain & few, True), (plain & ~few, False)):
            if chosen.any():
                loop = _middles_loop(counted, squares)
                more = (MIDDLES[function.name], samples.estimates, drawn.errors)
                run(loop, rows[chosen], drawn.draws, *more)
        rows = rows[~plain]
        if rows.size and drawn.errors.size:
            run(_resamples_loop(declared()[_ERROR_OF]), rows, drawn.errors)
    if rows.size:
        run(_resamples_loop(function), rows, drawn.draws)


def _resamples_loop(function: Function) -> Callable[..., Any]:
    if len(function.columns) == 2:
        return loop_for(
            function.name, drawing_loops.of_resampled_pairs, drawing_loops.PAIRS_SIGNATURE
        )
    return loop_for(function.name, drawing_loops.of_resamples, drawing_loops.SIGNATURE)


@functools.cache
def _middles_loop(counted: bool, squares: bool) -> Callable[..., Any]:
    """The loop over middles for small or large groups; without squares it compiles sooner."""
    if counted:
        template, name = middles.of_counted_middles, "of_counted_middles"
        return compile_driver(template, {}, name, middles.SIGNATURE)
    needed = middles.yes if squares else middles.no
    name = "of_middles_and_squares" if squares else "of_middles"
    replacements = {"with_squares": needed}
    return compile_driver(middles.of_middles, replacements, name, middles.SIGNATURE)
