"""The loops that draw a statistic of resamples, to be compiled for each way of drawing.

All of them take resamples first ≤ j < stop of the groups named by rows: group r holds
``values[starts[r] : starts[r] + lengths[r]]``, sorted, draws from the stream ``keys[r]`` and writes
its j-th draw to ``draws[r, j]``. Resample j has a stream of its own, so it comes out the same
whichever thread or portion draws it. steps is what counts as all of a group's work.
"""

from typing import Final

import numpy as np
import numpy.typing as npt

from midspread.udfs.declaring import Values, compiled
from midspread.udfs.drivers import DONE, STOP, Indices
from midspread.udfs.resampling.randomness import stream
from midspread.udfs.resampling.resamples import (
    BLOCK,
    SPARE,
    WORDS,
    resample_into,
    resample_rows,
)
from midspread.udfs.resampling.statistics import statistic
from midspread.udfs.resampling.variates import uniform_rank

Keys = npt.NDArray[np.uint64]

SIGNATURE: Final = (
    "void(float64[::1], int64[::1], int64[::1], int64[::1], uint64[::1], float64[::1], int64, "
    "int64, int64, float64[:, ::1], int64[::1])"
)
PAIRS_SIGNATURE: Final = f"void(float64[::1], {SIGNATURE.removeprefix('void(')}"
RANKS_SIGNATURE: Final = SIGNATURE.removesuffix(")") + ", int64[::1], int64[::1])"


@compiled
def count_draw(control: Indices, finished: int, steps: int) -> int:
    """Count what is finished as done, a whole step each; what is left of it."""
    if finished >= steps:
        control[DONE] += finished // steps
        finished %= steps
    return finished


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
            finished = count_draw(control, finished + n, steps)


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
            finished = count_draw(control, finished + n, steps)


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
            finished = count_draw(control, finished + n, steps)
