"""The loops that draw a statistic of resamples, to be compiled for each way of drawing.

All of them take resamples first ≤ j < stop of the groups named by rows: group r holds
``values[starts[r] : starts[r] + lengths[r]]``, sorted, draws from the stream ``keys[r]`` and writes
its j-th draw to ``draws[r, j]``. Resample j has a stream of its own, so it comes out the same
whichever thread or portion draws it. steps is what counts as all of a group's work.
"""

import math
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from midspread.udfs.declaring import NULL, Values, compiled
from midspread.udfs.drivers import DONE, STOP, Indices
from midspread.udfs.location.trimming import cut_from_each_tail
from midspread.udfs.resampling.randomness import stream
from midspread.udfs.resampling.resamples import (
    BLOCK,
    SPARE,
    WORDS,
    Counts,
    Words,
    clear,
    count_draws,
    resample_into,
    resample_rows,
    sum_draws,
)
from midspread.udfs.resampling.summed import set_power_sums, summed_draws
from midspread.udfs.resampling.variates import binomial, uniform_rank

Keys = npt.NDArray[np.uint64]

SIGNATURE: Final = (
    "void(float64[::1], int64[::1], int64[::1], int64[::1], uint64[::1], float64[::1], int64, "
    "int64, int64, float64[:, ::1], int64[::1])"
)
PAIRS_SIGNATURE: Final = f"void(float64[::1], {SIGNATURE.removeprefix('void(')}"
RANKS_SIGNATURE: Final = SIGNATURE.removesuffix(")") + ", int64[::1], int64[::1])"
MIDDLES_SIGNATURE: Final = SIGNATURE.removesuffix(")") + ", int64, float64[::1], float64[:, ::1])"

TRIMMED_MEAN: Final = 0
WINSORIZED_MEAN: Final = 1
DEVIATION: Final = 2
ERROR: Final = 3
"""What `of_middles` computes: means, a winsorized standard deviation, a trimmed mean's error."""

_COUNTED: Final = 100
"""Below so many values all draws are counted, and sorted by that."""
_SUMMED: Final = 1000
"""From so many values on sums may be drawn as such."""


def statistic(*_arguments: Any) -> float:
    """Stands for a statistic of sorted values, or of sorted pairs, with its parameters."""
    raise TypeError("replaced when a loop is compiled")


def of_resamples(
    values: Values,
    starts: Indices,
    lengths: Indices,
    rows: Indices,
    keys: Keys,
    parameters: Values,
    first: int,
    stop: int,
    steps: int,
    draws: Values,
    control: Indices,
) -> None:
    """Any statistic: each resample is written out, sorted, and given to the kernel."""
    counts = np.empty(BLOCK, np.int32)
    words = np.empty(WORDS, np.uint64)
    for place in range(rows.size):
        r = rows[place]
        n = lengths[r]
        x = values[starts[r] : starts[r] + n]
        room = np.empty(n + SPARE)
        y = room[:n]
        finished = (first * n) % steps
        for j in range(first, stop):
            if control[STOP] != 0:
                return
            resample_into(stream(keys[r], j), counts, words, x, room)
            draws[r, j] = statistic(y, parameters)
            finished += n
            if finished >= steps:
                control[DONE] += finished // steps
                finished %= steps


def of_resampled_pairs(
    others: Values,
    values: Values,
    starts: Indices,
    lengths: Indices,
    rows: Indices,
    keys: Keys,
    parameters: Values,
    first: int,
    stop: int,
    steps: int,
    draws: Values,
    control: Indices,
) -> None:
    """A statistic of pairs, values with others, which are resampled together."""
    counts = np.empty(BLOCK, np.int32)
    words = np.empty(WORDS, np.uint64)
    for place in range(rows.size):
        r = rows[place]
        n = lengths[r]
        drawn = np.empty(n + SPARE, np.int64)
        y = np.empty(n)
        x = np.empty(n)
        finished = (first * n) % steps
        for j in range(first, stop):
            if control[STOP] != 0:
                return
            resample_rows(stream(keys[r], j), counts, words, drawn)
            for i in range(n):
                y[i] = values[starts[r] + drawn[i]]
                x[i] = others[starts[r] + drawn[i]]
            draws[r, j] = statistic(y, x, parameters)
            finished += n
            if finished >= steps:
                control[DONE] += finished // steps
                finished %= steps


def of_drawn_ranks(
    values: Values,
    starts: Indices,
    lengths: Indices,
    rows: Indices,
    keys: Keys,
    parameters: Values,
    first: int,
    stop: int,
    steps: int,
    draws: Values,
    control: Indices,
    ranks: Indices,
    rank_starts: Indices,
) -> None:
    """A statistic that reads a few order statistics only: these are drawn, the rest is not.

    The k-th smallest of n uniform numbers is beta distributed, and given it the ones above are
    order statistics of the rest; each falls on one of the n values. The kernel reads them at their
    places in an otherwise unused array.
    """
    y = np.zeros(lengths.max())
    for place in range(rows.size):
        r = rows[place]
        n = lengths[r]
        x = values[starts[r] : starts[r] + n]
        read = ranks[rank_starts[r] : rank_starts[r + 1]]
        finished = (first * n) % steps
        for j in range(first, stop):
            if control[STOP] != 0:
                return
            state = stream(keys[r], j)
            at = 0.0
            before = 0
            for i in range(read.size):
                part, state = uniform_rank(state, read[i] - before, n - before)
                at += (1.0 - at) * part
                before = read[i]
                y[before - 1] = x[min(int(at * n), n - 1)]
            draws[r, j] = statistic(y[:n], parameters)
            finished += n
            if finished >= steps:
                control[DONE] += finished // steps
                finished %= steps


def of_middles(
    values: Values,
    starts: Indices,
    lengths: Indices,
    rows: Indices,
    keys: Keys,
    parameters: Values,
    first: int,
    stop: int,
    steps: int,
    draws: Values,
    control: Indices,
    figure: int,
    estimates: Values,
    errors: Values,
) -> None:
    """Means and deviations of trimmed or winsorized values, share parameters[0]; finite values.

    In large groups the lowest and the highest value kept are drawn as order statistics. Given
    them, the draws in between are independent and uniform between both, so that nothing need be
    drawn of what is cut, and the sum of very many of the rest is drawn as such: see `summed_draws`.
    In small groups all draws are counted. With errors, the standard errors of trimmed means too.
    """
    with_errors = errors.shape[0] > 0
    with_squares = with_errors or figure >= DEVIATION
    words = np.empty(WORDS, np.uint64)
    for place in range(rows.size):
        r = rows[place]
        n = lengths[r]
        x = values[starts[r] : starts[r] + n]
        g = cut_from_each_tail(n, parameters[0])
        if parameters[0] == 0.5 or 2 * g >= n:
            g = (n - 1) // 2
        v = np.empty(n)
        for i in range(n):
            v[i] = x[i] - x[n // 2]
        counted = n < _COUNTED and (g > 0 or with_squares)
        counts = np.empty(n if counted else 0, np.int32)
        kept = n - 2 * g
        more = float(g) if figure == WINSORIZED_MEAN else 0.0
        weight = kept + 2.0 * more
        original = more * (v[g] + v[n - g - 1])
        for i in range(g, n - g):
            original += v[i]
        in_closed_form = n >= _SUMMED and not with_squares
        sums = np.empty((3, n + 1 if in_closed_form else 0))
        unit = v[n - g - 1] - v[g]
        if in_closed_form:
            set_power_sums(v, unit, sums)
        finished = (first * n) % steps
        for j in range(first, stop):
            if control[STOP] != 0:
                return
            state = stream(keys[r], j)
            low = high = squares = 0.0
            under = 0
            if counted:
                clear(counts)
                count_draws(state, counts, n, words)
                total, under, over = _kept_draws(v, counts, g, n - g)
                low, high = v[under], v[over]
            elif g == 0:
                total, state = summed_draws(state, sums, unit, v, 0, n, n)
                if math.isnan(total):
                    total, squares, state = sum_draws(state, v, n, words, with_squares)
            else:
                total, squares, low, high = _between_order_statistics(
                    state, v, g, sums, unit, words, with_squares
                )
            spread = 0.0
            if with_squares and not ((counted or g > 0) and low == high):
                full = total + g * (low + high)
                if counted:
                    spread = _squares_around(full / n, v, counts, n - g, under)
                else:
                    # The middle value lies within a standard deviation of the mean: nothing cancels
                    spread = squares + g * (low * low + high * high) - full * full / n
                spread = max(spread, 0.0)
            error = math.sqrt(spread / (kept * (kept - 1.0))) if kept > 1 else NULL
            if figure == DEVIATION:
                draws[r, j] = math.sqrt(spread / (n - 1.0))
            elif figure == ERROR:
                draws[r, j] = error
            else:
                moved = (total + more * (low + high) - original) / weight
                draws[r, j] = min(max(estimates[r] + moved, x[0]), x[n - 1])
            if with_errors:
                errors[r, j] = error
            finished += n
            if finished >= steps:
                control[DONE] += finished // steps
                finished %= steps


@compiled
def _between_order_statistics(
    state: np.uint64,
    v: Values,
    g: int,
    sums: Values,
    unit: float,
    words: Words,
    with_squares: bool,
) -> tuple[float, float, float, float]:
    """Of a resample without its g lowest and highest: sum, squares, lowest and highest value.

    A draw is the value number ⌊n u⌋, u uniform. Of the cells of u only the two that the outermost
    kept draws fall in are open in part.
    """
    n = v.size
    kept = n - 2 * g
    u, state = uniform_rank(state, g + 1, n)
    start = u * n
    bottom = min(int(start), n - 1)
    low = v[bottom]
    if kept == 1:
        return low, low * low, low, low
    part, state = uniform_rank(state, kept - 1, n - g - 1)
    end = (u + (1.0 - u) * part) * n
    top = min(int(end), n - 1)
    high = v[top]
    left = kept - 2
    if low == high:
        return kept * low, kept * low * low, low, low
    lowest, state = binomial(state, left, (bottom + 1 - start) / (end - start))
    left -= lowest
    highest = left
    total = squares = 0.0
    if top > bottom + 1:
        highest, state = binomial(state, left, (end - top) / (end - (bottom + 1)))
        left -= highest
        total, state = summed_draws(state, sums, unit, v, bottom + 1, top, left)
        if math.isnan(total):
            total, squares, state = sum_draws(state, v[bottom + 1 : top], left, words, with_squares)
    total += (lowest + 1) * low + (highest + 1) * high
    squares += (lowest + 1) * low * low + (highest + 1) * high * high
    return total, squares, low, high


@compiled
def _kept_draws(v: Values, counts: Counts, first: int, stop: int) -> tuple[float, int, int]:
    """Of draws in order, those with numbers first … stop − 1: sum, lowest and highest.

    Lowest and highest are places in v.
    """
    before = under = 0
    while before + counts[under] <= first:
        before += counts[under]
        under += 1
    total = 0.0
    over = under
    reached = first
    while True:
        before += counts[over]
        now = min(before, stop)
        total += v[over] * (now - reached)
        if before >= stop:
            return total, under, over
        reached = now
        over += 1


@compiled
def _squares_around(centre: float, v: Values, counts: Counts, stop: int, under: int) -> float:
    """Σ (v − centre)² over draws in order.

    The lowest are pulled in to place under, those from number stop on to the draw before.
    """
    n = v.size
    before = 0
    for i in range(under):
        before += counts[i]
    place = under
    reached = 0
    squares = 0.0
    while reached < n:
        before += counts[place]
        now = n if before >= stop else before
        away = v[place] - centre
        squares += away * away * (now - reached)
        reached = now
        place += 1
    return squares
