"""The loops that draw means and deviations of trimmed or winsorized values.

They are called as those of `drawing_loops`.
"""

import math
from typing import Final

import numpy as np

from midspread.udfs.declaring import NULL, Values, compiled
from midspread.udfs.drivers import STOP, Indices
from midspread.udfs.location.trimming import cut_of
from midspread.udfs.resampling import drawing_loops
from midspread.udfs.resampling.drawing_loops import Keys, count_draw
from midspread.udfs.resampling.randomness import stream
from midspread.udfs.resampling.resamples import WORDS, Counts, clear, count_few_draws, sum_draws
from midspread.udfs.resampling.summed import set_power_sums, summed_draws
from midspread.udfs.resampling.variates import binomial, uniform_rank

SIGNATURE: Final = (
    drawing_loops.SIGNATURE.removesuffix(")") + ", int64, float64[::1], float64[:, ::1])"
)

TRIMMED_MEAN: Final = 0
WINSORIZED_MEAN: Final = 1
DEVIATION: Final = 2
ERROR: Final = 3
"""What is computed: means, a winsorized standard deviation, the error of a trimmed mean."""

COUNTED: Final = 100
"""Below so many values all draws are counted."""
_SUMMED: Final = 1000
"""From so many values on sums may be drawn as such."""


def with_squares() -> bool:
    """Stands for `no` or `yes`: whether a loop needs sums of squares."""
    raise TypeError("replaced when a loop is compiled")


@compiled
def no() -> bool:
    """For means."""
    return False


@compiled
def yes() -> bool:
    """For standard deviations and errors."""
    return True


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

    The lowest and the highest value kept are drawn as order statistics. Given them, the draws in
    between are independent and uniform between both, so that nothing need be drawn of what is cut,
    and the sum of very many of the rest is drawn as such: see `summed_draws`. With errors, the
    standard errors of trimmed means too.
    """
    words = np.empty(WORDS, np.uint64)
    for place in range(rows.size):
        r = rows[place]
        n = lengths[r]
        x = values[starts[r] : starts[r] + n]
        v = around_the_middle(x)
        g = cut_of(n, parameters[0])
        more, weight, original = weights_of(v, g, figure)
        kept = n - 2 * g
        in_closed_form = n >= _SUMMED and not with_squares()
        sums = np.empty((3, n + 1 if in_closed_form else 0))
        unit = v[n - g - 1] - v[g]
        if in_closed_form:
            set_power_sums(v, unit, sums)
        finished = (first * n) % steps
        for j in range(first, stop):
            if control[STOP] != 0:
                return
            state = stream(keys[r], j)
            low = high = total = squares = 0.0
            start, end, left = 0, n, n
            if g > 0:
                bottom, end, lowest, left, state = _outermost(state, n, g)
                start = bottom + 1
                low, high = v[bottom], v[end]
                if low == high:
                    left = 0
                highest = kept - lowest - left
                total = lowest * low + highest * high
                if with_squares():
                    squares = lowest * low * low + highest * high * high
            if left > 0:
                part = math.nan
                if not with_squares():
                    part, state = summed_draws(state, sums, unit, v, start, end, left)
                if math.isnan(part):
                    part, square, state = sum_draws(
                        state, v[start:end], left, words, with_squares()
                    )
                    squares += square
                total += part
            spread = 0.0
            if with_squares() and (g == 0 or low != high):
                # The middle value lies within a standard deviation of the mean: nothing cancels.
                full = total + g * (low + high)
                spread = squares + g * (low * low + high * high) - full * full / n
            moved = (total + more * (low + high) - original) / weight
            mean = min(max(estimates[r] + moved, x[0]), x[n - 1])
            draws[r, j] = figure_of(figure, mean, spread, n, kept)
            if errors.shape[0] > 0:
                errors[r, j] = figure_of(ERROR, mean, spread, n, kept)
            finished = count_draw(control, finished + n, steps)


def of_counted_middles(
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
    """As `of_middles`, for small groups: all draws are counted, and sorted by that."""
    for place in range(rows.size):
        r = rows[place]
        n = lengths[r]
        x = values[starts[r] : starts[r] + n]
        v = around_the_middle(x)
        g = cut_of(n, parameters[0])
        more, weight, original = weights_of(v, g, figure)
        counts = np.empty(n, np.int32)
        finished = (first * n) % steps
        for j in range(first, stop):
            if control[STOP] != 0:
                return
            clear(counts)
            count_few_draws(stream(keys[r], j), counts, n)
            total, under, over = _kept_draws(v, counts, g, n - g)
            low, high = v[under], v[over]
            spread = 0.0
            if low != high:
                full = total + g * (low + high)
                spread = _squares_around(full / n, v, counts, n - g, under)
            moved = (total + more * (low + high) - original) / weight
            mean = min(max(estimates[r] + moved, x[0]), x[n - 1])
            draws[r, j] = figure_of(figure, mean, spread, n, n - 2 * g)
            if errors.shape[0] > 0:
                errors[r, j] = figure_of(ERROR, mean, spread, n, n - 2 * g)
            finished = count_draw(control, finished + n, steps)


@compiled
def around_the_middle(x: Values) -> Values:
    """Distances to the middle value."""
    v = np.empty(x.size)
    for i in range(x.size):
        v[i] = x[i] - x[x.size // 2]
    return v


@compiled
def weights_of(v: Values, g: int, figure: int) -> tuple[float, float, float]:
    """How often the outermost kept values count beside the others, all weights, and the sum."""
    n = v.size
    more = float(g) if figure == WINSORIZED_MEAN else 0.0
    original = more * (v[g] + v[n - g - 1])
    for i in range(g, n - g):
        original += v[i]
    return more, n - 2 * g + 2.0 * more, original


@compiled
def figure_of(figure: int, mean: float, spread: float, n: int, kept: int) -> float:
    """What is asked for, from the mean of a resample and its winsorized sum of squares."""
    if figure <= WINSORIZED_MEAN:
        return mean
    if figure == DEVIATION:
        return math.sqrt(max(spread, 0.0) / (n - 1.0))
    return math.sqrt(max(spread, 0.0) / (kept * (kept - 1.0))) if kept > 1 else NULL


@compiled
def _outermost(state: np.uint64, n: int, g: int) -> tuple[int, int, int, int, np.uint64]:
    """Of n draws from n places without the g lowest and highest: lowest place, highest place.

    Then how many draws fall on the lowest and how many strictly in between. A draw is the place
    ⌊n u⌋, u uniform. Of the cells of u only the two that the outermost kept draws fall in are open
    in part.
    """
    kept = n - 2 * g
    u, state = uniform_rank(state, g + 1, n)
    start = u * n
    bottom = min(int(start), n - 1)
    if kept == 1:
        return bottom, bottom, 1, 0, state
    part, state = uniform_rank(state, kept - 1, n - g - 1)
    end = (u + (1.0 - u) * part) * n
    top = min(int(end), n - 1)
    if bottom == top:
        return bottom, top, kept, 0, state
    between = kept - 2
    lowest, state = binomial(state, between, (bottom + 1 - start) / (end - start))
    between -= lowest
    highest = between
    if top > bottom + 1:
        highest, state = binomial(state, between, (end - top) / (end - (bottom + 1)))
    return bottom, top, lowest + 1, between - highest, state


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
