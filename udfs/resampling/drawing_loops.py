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

_COUNTED: Final = 500
"""Below so many values all draws are counted: zones do not pay."""
_REACH: Final = 3.5
"""Half width of a window, in standard deviations of the place of the cut."""
_WORTH_SUMMING: Final = 256


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

    The sorted values are cut into zones. In the tails, where a resample's cut cannot be, draws are
    only counted; in the middle, which is always kept, they are only summed; in a window around
    either cut they are counted value by value. Should a cut leave its window, all zones are counted
    value by value, given how many draws fell in each. With errors, their standard errors too.
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
        a, b = _zones(n, g, with_errors)
        lost, middle, c = a, n - 2 * b, n - b
        all_counted = a == 0 and b > 0 and middle < 2
        counts = np.empty(n if all_counted else b - a, np.int32)
        upper_counts = np.empty(b - a, np.int32)
        everything = np.empty(0, np.int32)
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
            if b == 0:
                total, squares, state = sum_draws(state, v, n, with_errors)
            elif all_counted:
                clear(counts)
                state = count_draws(state, counts, n)
                total, squares, under, over = _kept_draws(v, counts, 0, g, n - g)
                low, high = v[under], v[over]
            else:
                below, state = binomial(state, n, lost / n)
                inside, state = binomial(state, n - below, (b - a) / (n - a))
                summed, state = binomial(state, n - below - inside, middle / (n - b))
                rest = n - below - inside - summed
                above, state = binomial(state, rest, (b - a) / b)
                upper = n - rest
                if below <= g < below + inside and upper < n - g <= upper + above:
                    clear(counts)
                    state = count_draws(state, counts, inside)
                    total, squares, under, _ = _kept_draws(v[a:b], counts, below, g, n - g)
                    low = v[a + under]
                    clear(upper_counts)
                    state = count_draws(state, upper_counts, above)
                    part, square, _, over = _kept_draws(
                        v[c : c + b - a], upper_counts, upper, g, n - g
                    )
                    high = v[c + over]
                    total += part
                    squares += square
                    part, square, state = sum_draws(state, v[b:c], summed, with_errors)
                    total += part
                    squares += square
                else:
                    if everything.size == 0:
                        everything = np.empty(n, np.int32)
                    clear(everything)
                    if lost > 0:
                        state = count_draws(state, everything[:a], below)
                        state = count_draws(state, everything[n - a :], rest - above)
                    state = count_draws(state, everything[a:b], inside)
                    state = count_draws(state, everything[b:c], summed)
                    state = count_draws(state, everything[c : n - a], above)
                    total, squares, under, over = _kept_draws(v, everything, 0, g, n - g)
                    low, high = v[under], v[over]
            moved = (total + more * (low + high) - original) / weight
            draws[r, j] = min(max(estimates[r] + moved, x[0]), x[n - 1])
            if with_errors:
                full = total + g * (low + high)
                spread = squares + g * (low * low + high * high) - full * full / n
                if (b > 0 and low == high) or spread < 0.0:
                    spread = 0.0
                errors[r, j] = math.sqrt(spread / (kept * (kept - 1.0))) if kept > 1 else NULL
            finished += n
            if finished >= steps:
                control[DONE] += finished // steps
                finished %= steps


@compiled
def _zones(n: int, g: int, counted_means: bool) -> tuple[int, int]:
    """Where the lower window starts and stops; the upper one mirrors it.

    (0, 0) when nothing is cut and all draws are summed; a window that holds all of the lower half
    when all draws are counted.
    """
    half = int(_REACH * math.sqrt(g * (1.0 - g / n))) + 8
    if n < _COUNTED and (g > 0 or counted_means):
        return 0, n // 2
    if g == 0:
        return 0, 0
    a, b = max(g - half, 0), g + half
    if n - 2 * b < _WORTH_SUMMING:
        return 0, n // 2
    return a, b


@compiled
def _kept_draws(
    v: Values, counts: npt.NDArray[np.int32], before: int, first: int, stop: int
) -> tuple[float, float, int, int]:
    """Of draws in order, those with numbers first … stop − 1: sum, squares, lowest and highest.

    before is how many draws lie below v[0]; lowest and highest are places in v, right only when
    the draw with that number is in v.
    """
    size = v.size
    under = 0
    while under < size and before + counts[under] <= first:
        before += counts[under]
        under += 1
    total = squares = 0.0
    over = under
    reached = max(before, first)
    while over < size:
        before += counts[over]
        if before >= stop:
            share = v[over] * (stop - reached)
            return total + share, squares + share * v[over], under, over
        share = v[over] * (before - reached)
        total += share
        squares += share * v[over]
        reached = before
        over += 1
    return total, squares, under, over
