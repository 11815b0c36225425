"""Harrell–Davis deciles of resampled values, for many samples at once."""

import functools
import math
from collections.abc import Callable
from typing import Final

import numpy as np

from midspread.udfs.arithmetic.beta import beta_masses
from midspread.udfs.compiling import compile_driver
from midspread.udfs.declaring import Values, compiled
from midspread.udfs.drivers import DONE, STOP, Indices
from midspread.udfs.location.quantiles import harrell_davis
from midspread.udfs.resampling.randomness import content_key, stream
from midspread.udfs.resampling.resamples import BLOCK, SPARE, WORDS, resample_into

DECILES: Final = 9


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
    """Draw n of the n values with replacement and move every decile, for each resample.

    A resample is written out in order, so that a decile is a sum over consecutive places.
    """
    n = x.size
    # Stream by content and seed; the place keeps two equal samples from moving together.
    key = stream(stream(content_key(x), seed), place)
    masses = np.empty(n)
    bounds = np.empty((DECILES, 2), np.int64)
    widest = 0
    for k in range(DECILES):
        bounds[k, 0], bounds[k, 1] = _decile_masses(k, masses)
        widest = max(widest, bounds[k, 1] - bounds[k, 0])
    weights = np.empty((DECILES, widest))
    for k in range(DECILES):
        _decile_masses(k, masses)
        total = 0.0
        for i in range(bounds[k, 0], bounds[k, 1]):
            total += masses[i]
        for i in range(bounds[k, 0], bounds[k, 1]):
            weights[k, i - bounds[k, 0]] = masses[i] / total
    origin = x[n // 2] if not math.isinf(x[n // 2]) else 0.0
    away = x - origin
    at_rest = np.empty(DECILES)
    for k in range(DECILES):
        at_rest[k] = _weighted(away, weights[k], bounds[k, 0], bounds[k, 1])
    counts = np.empty(min(n, BLOCK), np.int32)
    words = np.empty(WORDS, np.uint64)
    drawn = np.empty(n + SPARE)
    for r in range(first, last):
        if control[STOP] != 0:
            return
        resample_into(stream(key, r), counts, words, away, drawn)
        for k in range(DECILES):
            moved = _weighted(drawn, weights[k], bounds[k, 0], bounds[k, 1])
            moves[r, k] = moved - at_rest[k]


@compiled
def _decile_masses(k: int, masses: Values) -> tuple[int, int]:
    """Harrell and Davis's weights of decile k from 0, up to a factor: from first to stop."""
    n = masses.size
    prob = (k + 1) / 10.0
    return beta_masses((n + 1) * prob, (n + 1) * (1.0 - prob), masses)


@compiled
def _weighted(x: Values, weights: Values, first: int, stop: int) -> float:
    """Σ weight · x over places; four sums, as each addition waits for the one before it."""
    a = b = c = d = 0.0
    i = first
    while i + 4 <= stop:
        a += weights[i - first] * x[i]
        b += weights[i - first + 1] * x[i + 1]
        c += weights[i - first + 2] * x[i + 2]
        d += weights[i - first + 3] * x[i + 3]
        i += 4
    while i < stop:
        a += weights[i - first] * x[i]
        i += 1
    return (a + b) + (c + d)
