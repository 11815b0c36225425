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
    clear,
    count_draws,
    resample_into,
    resample_rows,
    sum_draws,
)
from midspread.udfs.resampling.variates import binomial, uniform_rank

Keys = npt.NDArray[np.uint64]

SIGNATURE: Final = (
    "void(float64[::1], int64[::1], int64[::1], int64[::1], uint64[::1], float64[::1], int64, "
    "int64, int64, float64[:, ::1], int64[::1])"
)
PAIRS_SIGNATURE: Final = f"void(float64[::1], {SIGNATURE.removeprefix('void(')}"
RANKS_SIGNATURE: Final = SIGNATURE.removesuffix(")") + ", int64[::1], int64[::1])"
MIDDLES_SIGNATURE: Final = SIGNATURE.removesuffix(")") + ", boolean, float64[::1], float64[:, ::1])"

_COUNTED: Final = 100
"""Below so many values all draws are counted, and sorted by that."""


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
            resample_into(stream(keys[r], j), counts, x, room)
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
            resample_rows(stream(keys[r], j), counts, drawn)
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
    winsorize: bool,
    estimates: Values,
    errors: Values,
) -> None:
    """Trimmed or winsorized means, of share parameters[0]; finite values only.

    In large groups the lowest and the highest value kept are drawn as order statistics. Given
    them, the draws in between are independent and uniform between both, so that nothing need be
    drawn of what is cut. In small groups all draws are counted. With errors, their standard errors
    too.
    """
    with_errors = errors.shape[0] > 0
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
        counted = n < _COUNTED and (g > 0 or with_errors)
        counts = np.empty(n if counted else 0, np.int32)
        kept = n - 2 * g
        more = float(g) if winsorize else 0.0
        weight = kept + 2.0 * more
        original = more * (v[g] + v[n - g - 1])
        for i in range(g, n - g):
            original += v[i]
        finished = (first * n) % steps
        for j in range(first, stop):
            if control[STOP] != 0:
                return
            state = stream(keys[r], j)
            low = high = 0.0
            if counted:
                clear(counts)
                count_draws(state, counts, n)
                total, squares, under, over = _kept_draws(v, counts, g, n - g)
                low, high = v[under], v[over]
            elif g == 0:
                total, squares, state = sum_draws(state, v, n, with_errors)
            else:
                total, squares, low, high = _between_order_statistics(state, v, g, with_errors)
            moved = (total + more * (low + high) - original) / weight
            draws[r, j] = min(max(estimates[r] + moved, x[0]), x[n - 1])
            if with_errors:
                full = total + g * (low + high)
                spread = squares + g * (low * low + high * high) - full * full / n
                if ((counted or g > 0) and low == high) or spread < 0.0:
                    spread = 0.0
                errors[r, j] = math.sqrt(spread / (kept * (kept - 1.0))) if kept > 1 else NULL
            finished += n
            if finished >= steps:
                control[DONE] += finished // steps
                finished %= steps


@compiled
def _between_order_statistics(
    state: np.uint64, v: Values, g: int, with_squares: bool
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
    if bottom == top:
        return kept * low, kept * low * low, low, low
    lowest, state = binomial(state, left, (bottom + 1 - start) / (end - start))
    left -= lowest
    highest = left
    total = squares = 0.0
    if top > bottom + 1:
        highest, state = binomial(state, left, (end - top) / (end - (bottom + 1)))
        total, squares, state = sum_draws(state, v[bottom + 1 : top], left - highest, with_squares)
    total += (lowest + 1) * low + (highest + 1) * high
    squares += (lowest + 1) * low * low + (highest + 1) * high * high
    return total, squares, low, high


@compiled
def _kept_draws(
    v: Values, counts: npt.NDArray[np.int32], first: int, stop: int
) -> tuple[float, float, int, int]:
    """Of draws in order, those with numbers first … stop − 1: sum, squares, lowest and highest.

    Lowest and highest are places in v.
    """
    before = under = 0
    while before + counts[under] <= first:
        before += counts[under]
        under += 1
    total = squares = 0.0
    over = under
    reached = first
    while True:
        before += counts[over]
        now = min(before, stop)
        share = v[over] * (now - reached)
        total += share
        squares += share * v[over]
        if before >= stop:
            return total, squares, under, over
        reached = now
        over += 1
