"""The same grid of choices after the labels are shuffled: how often choices agree by chance.

Values are pooled and sorted once; a shuffle only says which of them bear which label. Sums run
from the middle outwards, so that wild values at the ends take no digits from what a trimmed mean
keeps, and every estimator reads its sums off them.
"""

import functools
import math
from collections.abc import Callable
from typing import Final

import numpy as np

from midspread.udfs.arithmetic.order_statistics import distance
from midspread.udfs.arithmetic.windows import first_not_below
from midspread.udfs.compiling import compile_driver
from midspread.udfs.declaring import Values, compiled
from midspread.udfs.drivers import DONE, STOP, Indices
from midspread.udfs.resampling.randomness import below, content_key, stream
from midspread.udfs.sensitivity.choice_figures import median_place, without_rounding
from midspread.udfs.sensitivity.pooled import Windows, loses, pool, re_express

STEPS: Final = 1024
"""Critical values are given for 1 / df = 0, 1/STEPS, …, 1, as logarithms; between, on a line."""
_TWICE_MCKEAN_SCHRADER: Final = 2.0 * 2.5758293035489004


def _over_shuffles(
    values: Values,
    starts: Indices,
    jobs: Indices,
    powers: Values,
    windows: Windows,
    shares: Values,
    critical: Values,
    normal: float,
    seed: int,
    agreeing: Values,
    excluding: Values,
    control: Indices,
) -> None:
    """Count choices for each job (row, sample, first and last shuffle).

    Parameters
    ----------
    windows : ndarray of int64, shape (rows, powers, rules, 2)
        What each rule keeps of the values on each rung.
    critical, normal : ndarray of float64, float
        Two-sided critical values of Student's t by 1 / df, and of the normal.
    agreeing, excluding : ndarray of float64, shape (rows, shuffles)
        How many choices share the commoner sign; how many intervals exclude 0.
    """
    for j in range(jobs.shape[0]):
        row, s, first, last = jobs[j, 0], jobs[j, 1], jobs[j, 2], jobs[j, 3]
        m, n = starts[s + 1] - starts[s], starts[s + 2] - starts[s + 1]
        total = m + n
        x, labels = np.empty(total), np.empty(total, np.int8)
        pool(values[starts[s] : starts[s + 1]], values[starts[s + 1] : starts[s + 2]], x, labels)
        # By content, seed and the smaller number of rows: swapped labels draw alike.
        key = stream(stream(content_key(x), seed), min(m, n))
        rungs = np.empty((powers.size, total))
        sizes = np.empty(powers.size)
        for p in range(powers.size):
            sizes[p] = -1.0
            if not loses(x, powers[p]):
                sizes[p] = _prepare(x, powers[p], rungs[p])
        side = 1 if n <= m else 0
        # One place more than is needed, so that dealing never asks.
        chosen, rest = np.empty(min(m, n) + 1, np.int64), np.empty(max(m, n) + 1, np.int64)
        sums, squares = np.empty((2, max(m, n) + 1)), np.empty((2, max(m, n) + 1))
        counts = np.empty(3, np.int64)
        for r in range(first, last):
            deal(stream(key, r), chosen, rest)
            baseline, other = (rest, chosen) if side == 1 else (chosen, rest)
            baseline, other = baseline[:m], other[:n]
            counts[:] = 0
            for p in range(powers.size):
                if control[STOP] != 0:
                    return
                if sizes[p] < 0.0:
                    continue
                y = rungs[p]
                _sums_from_the_middle(y, baseline, sums[0], squares[0])
                _sums_from_the_middle(y, other, sums[1], squares[1])
                for rule in range(windows.shape[2]):
                    _count(
                        y,
                        baseline,
                        other,
                        windows[row, p, rule],
                        sums,
                        squares,
                        shares,
                        sizes[p],
                        critical,
                        normal,
                        counts,
                    )
            agreeing[row, r] = max(counts[0], counts[1])
            excluding[row, r] = counts[2]
            control[DONE] += total


@functools.cache
def shuffles_loop() -> Callable[..., None]:
    """`_over_shuffles`, compiled or loaded on the first call."""
    return compile_driver(
        _over_shuffles,
        {},
        "over_shuffles",
        "void(float64[::1], int64[::1], int64[:, ::1], float64[::1], int64[:, :, :, ::1], "
        "float64[::1], float64[::1], float64, int64, float64[:, ::1], float64[:, ::1], int64[::1])",
    )


@compiled
def _prepare(x: Values, power: float, y: Values) -> float:
    """Re-express into y, in a unit that can be squared."""
    size = re_express(x, power, y)
    n = y.size
    widest = max(abs(y[n // 4]), abs(y[3 * n // 4]))
    if widest == 0.0 or math.isinf(widest):
        widest = 0.0
        for i in range(n):
            if not math.isinf(y[i]):
                widest = max(widest, abs(y[i]))
    if widest > 0.0:
        # A power of two, so that nothing is rounded.
        unit = math.ldexp(1.0, max(-1000, min(1000, -math.frexp(widest)[1])))
        for i in range(n):
            y[i] *= unit
        size *= unit
    return size


@compiled
def deal(key: np.uint64, chosen: Indices, rest: Indices) -> None:
    """Choose places at random, each set of that size as likely as any other; both ascending.

    Both arrays have one place more than they are given.
    """
    total, wanted, taken = chosen.size + rest.size - 2, chosen.size - 1, 0
    for i in range(total):
        chosen[taken] = i
        rest[i - taken] = i
        taken += int(below(key, i, total - i) < wanted - taken)


@compiled
def _sums_from_the_middle(y: Values, places: Indices, sums: Values, squares: Values) -> None:
    """Running sums of the values at some places, 0 at the middle of all values."""
    n = places.size
    middle = first_not_below(places, y.size // 2)
    total = square = 0.0
    sums[middle] = squares[middle] = 0.0
    for i in range(middle, n):
        v = y[places[i]]
        total += v
        square += v * v
        sums[i + 1] = total
        squares[i + 1] = square
    total = square = 0.0
    for i in range(middle - 1, -1, -1):
        v = y[places[i]]
        total -= v
        square -= v * v
        sums[i] = total
        squares[i] = square


@compiled
def _count(
    y: Values,
    baseline: Indices,
    other: Indices,
    window: Indices,
    sums: Values,
    squares: Values,
    shares: Values,
    size: float,
    critical: Values,
    normal: float,
    counts: Indices,
) -> None:
    """Add what each estimator says of the values in a window: below 0, above 0, excludes 0."""
    a, b = first_not_below(baseline, window[0]), first_not_below(baseline, window[1])
    c, d = first_not_below(other, window[0]), first_not_below(other, window[1])
    if a == b or c == d:
        return
    for e in range(shares.size):
        share = shares[e]
        if share == 0.5:
            low, low_error = _median(y, baseline[a:b])
            high, high_error = _median(y, other[c:d])
            error = math.sqrt(low_error * low_error + high_error * high_error)
            known = b - a > 1 and d - c > 1 and error > 0.0
            reach = normal * error
        else:
            low, low_square, low_left = _trimmed(y, baseline, a, b, sums[0], squares[0], share)
            high, high_square, high_left = _trimmed(y, other, c, d, sums[1], squares[1], share)
            square = low_square + high_square
            known = low_left > 1 and high_left > 1 and square > 0.0 and not math.isinf(square)
            reach = 0.0
            if known:
                p, q = low_square / square, high_square / square
                reach = _critical(
                    p * p / (low_left - 1.0) + q * q / (high_left - 1.0), critical
                ) * math.sqrt(square)
        difference = without_rounding(high - low, size, low, high)
        if difference < 0.0:
            counts[0] += 1
        elif difference > 0.0:
            counts[1] += 1
        if known and abs(difference) > reach:
            counts[2] += 1


@compiled
def _trimmed(
    y: Values,
    places: Indices,
    start: int,
    stop: int,
    sums: Values,
    squares: Values,
    share: float,
) -> tuple[float, float, int]:
    """Trimmed mean, the square of its standard error, and how many values it keeps."""
    n = stop - start
    g = min(int(share * n), (n - 1) // 2)
    first, last = start + g, stop - g
    h = last - first
    total = sums[last] - sums[first]
    low, high = y[places[first]], y[places[last - 1]]
    if h < 2 or low == high:
        return low, 0.0, h
    mean = (total + g * (low + high)) / n
    square = squares[last] - squares[first] + g * (low * low + high * high) - n * mean * mean
    return total / h, max(square, 0.0) / (h * (h - 1.0)), h


@compiled
def _median(y: Values, places: Indices) -> tuple[float, float]:
    """Median and its standard error."""
    n = places.size
    low, high = y[places[(n - 1) // 2]], y[places[n // 2]]
    c = median_place(n)
    error = distance(y[places[n - c]], y[places[c - 1]]) / _TWICE_MCKEAN_SCHRADER
    return low if low == high else (low + high) / 2.0, error


@compiled
def _critical(per_df: float, critical: Values) -> float:
    """The critical value at 1 / df, read off the table."""
    place = min(per_df, 1.0) * STEPS
    below_it = min(int(place), STEPS - 1)
    part = place - below_it
    return math.exp((1.0 - part) * critical[below_it] + part * critical[below_it + 1])
