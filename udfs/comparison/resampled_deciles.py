"""Harrell–Davis deciles of resampled values, for many samples at once."""

import functools
import math
from collections.abc import Callable
from typing import Final

import numpy as np

from midspread.udfs.arithmetic.beta import beta_masses
from midspread.udfs.arithmetic.pair_tables import Places
from midspread.udfs.compiling import compile_driver
from midspread.udfs.declaring import Values, compiled
from midspread.udfs.drivers import DONE, STOP, Indices
from midspread.udfs.location.quantiles import harrell_davis
from midspread.udfs.resampling.randomness import below, content_key, stream

DECILES: Final = 9
_DRAWN_BETWEEN_LOOKS: Final = 1 << 22


def _over_resamples(
    values: Values,
    starts: Indices,
    jobs: Indices,
    seed: int,
    estimates: Values,
    moves: Values,
    control: Indices,
) -> None:
    """Fill ``moves[s, first : last]`` for each job (sample s, its place, first, last).

    Row r of a sample is by how much its deciles move in resample r; the job that begins at
    resample 0 writes the deciles themselves as well.
    """
    for j in range(jobs.shape[0]):
        if control[STOP] != 0:
            return
        s, place, first, last = jobs[j, 0], jobs[j, 1], jobs[j, 2], jobs[j, 3]
        x = values[starts[s] : starts[s + 1]]
        if first == 0:
            for k in range(DECILES):
                estimates[s, k] = math.nan
                if not math.isnan(x[x.size - 1]):
                    estimates[s, k] = harrell_davis(x, (k + 1) / 10.0)
        if x.size > 1 and not math.isnan(x[x.size - 1]):
            resample(x, place, first, last, seed, moves[s], control)
        control[DONE] += x.size * (last - first)


@functools.cache
def resample_loop() -> Callable[..., None]:
    """`_over_resamples`, compiled or loaded on the first call."""
    return compile_driver(
        _over_resamples,
        {},
        "over_resamples",
        "void(float64[::1], int64[::1], int64[:, ::1], int64, float64[:, ::1], "
        "float64[:, :, ::1], int64[::1])",
    )


@compiled
def resample(
    x: Values, place: int, first: int, last: int, seed: int, moves: Values, control: Indices
) -> None:
    """Draw n of the n values with replacement and move every decile, for each resample."""
    n = x.size
    # Stream by content and seed; the place keeps two equal samples from moving together.
    key = stream(stream(content_key(x), seed), place)
    weights = np.empty((DECILES, n + 1))
    bounds = np.empty((DECILES, 2), np.int64)
    for k in range(DECILES):
        cumulative_weights((k + 1) / 10.0, weights[k], bounds[k])
    origin = x[n // 2] if not math.isinf(x[n // 2]) else 0.0
    up_to = np.empty(n + 1, np.int32)
    for i in range(n + 1):
        up_to[i] = i
    at_rest = np.empty(DECILES)
    for k in range(DECILES):
        at_rest[k] = weighted(x, origin, up_to, weights[k], bounds[k, 0], bounds[k, 1])
    for r in range(first, last):
        own = stream(key, r)
        for i in range(n + 1):
            up_to[i] = 0
        drawn = 0
        while drawn < n:
            if control[STOP] != 0:
                return
            stop = min(n, drawn + _DRAWN_BETWEEN_LOOKS)
            for i in range(drawn, stop):
                up_to[below(own, i, n) + 1] += 1
            drawn = stop
        for i in range(n):
            up_to[i + 1] += up_to[i]
        for k in range(DECILES):
            moved = weighted(x, origin, up_to, weights[k], bounds[k, 0], bounds[k, 1])
            moves[r, k] = moved - at_rest[k]


@compiled
def cumulative_weights(prob: float, weights: Values, bounds: Indices) -> None:
    """Sums of Harrell and Davis's weights: ``weights[i]`` of the first i order statistics.

    Weights before bounds[0] and from bounds[1] on are negligible; only what lies between is set.
    """
    n = weights.size - 1
    masses = np.empty(n)
    first, stop = beta_masses((n + 1) * prob, (n + 1) * (1.0 - prob), masses)
    total = 0.0
    for i in range(first, stop):
        total += masses[i]
    so_far = 0.0
    for i in range(first, stop):
        weights[i] = so_far / total
        so_far += masses[i]
    weights[stop] = 1.0
    bounds[0] = first
    bounds[1] = stop


@compiled
def weighted(
    x: Values, origin: float, up_to: Places, weights: Values, first: int, stop: int
) -> float:
    """Σ weight · (x − origin) of a resample that holds ``up_to[i]`` of the first i values."""
    low, high = 0, x.size
    while low < high:  # the value at rank first: the last i with up_to[i] ≤ first
        middle = (low + high + 1) // 2
        if up_to[middle] <= first:
            low = middle
        else:
            high = middle - 1
    total = 0.0
    i, before = low, first
    while before < stop:
        after = min(up_to[i + 1], stop)
        if after > before:
            total += (weights[after] - weights[before]) * (x[i] - origin)
            before = after
        i += 1
    return total
