"""How long the blocks of a block bootstrap should be, from the series itself."""

import math
from typing import Final

import numpy as np

from midspread.udfs.declaring import Values, compiled
from midspread.udfs.drivers import STOP, Indices
from midspread.udfs.resampling.counted import Small
from midspread.udfs.resampling.counted_drawing import sums_of_units

LENGTH_SIGNATURE: Final = (
    "void(float64[::1], int32[::1], int64[::1], int64[::1], float64[::1], int64[::1])"
)


def circular_block_lengths(
    values: Values,
    positions: Small,
    starts: Indices,
    lengths: Indices,
    out: Values,
    control: Indices,
) -> None:
    """The length for each group of sorted values with their positions in the series, from 0."""
    for r in range(lengths.size):
        if control[STOP] != 0:
            return
        x = values[starts[r] : starts[r + 1]]
        unit = positions[starts[r] : starts[r + 1]]
        if math.isnan(x[x.size - 1]):
            out[r] = 1.0
            continue
        origin = x[x.size // 2]
        if math.isinf(x[0]) or math.isinf(x[x.size - 1]):
            out[r] = default_length(x.size)
            continue
        series = sums_of_units(x, unit, lengths[r], origin)
        largest = max(abs(x[0] - origin), abs(x[x.size - 1] - origin))
        out[r] = circular_block_length(series / largest, control) if largest > 0.0 else 1.0


@compiled
def default_length(n: int) -> float:
    """∛n, the order of the best length, where the series gives none."""
    return float(n) ** (1.0 / 3.0)


@compiled
def circular_block_length(series: Values, control: Indices) -> float:
    """The length that Politis & White 2004 estimate, as Patton, Politis & White 2009 correct it.

    (2 Ĝ² / D̂)^(1/3) n^(1/3), at most ⌈min(3 √n, n/3)⌉; Ĝ = Σ λ(k/M) abs(k) R̂(k),
    D̂ = (4/3) (Σ λ(k/M) R̂(k))² with the flat-top window λ, M = 2 m̂, m̂ the first of K successive
    lags whose autocorrelations are all below 2 √(log₁₀ n / n).
    """
    n = series.size
    most = math.ceil(min(3.0 * math.sqrt(n), n / 3.0))
    runs = max(5, int(math.ceil(math.sqrt(math.log10(n)))))
    lags = min(int(math.ceil(math.sqrt(n))) + runs, n - 1)
    away = series - series.mean()
    squares = 0.0
    for i in range(n):
        squares += away[i] * away[i]
    if not squares > 0.0:
        return 1.0
    bound = 2.0 * math.sqrt(math.log10(n) / n)
    covariances = np.zeros(lags + 1)
    covariances[0] = squares
    first_squares = last_squares = 0.0  # of what a lag leaves out at each end
    first_squares = away[0] * away[0]
    last_squares = away[n - 1] * away[n - 1]
    quiet = 0
    window = lags
    found = False
    k = 0
    while k < window:
        k += 1
        if control[STOP] != 0:
            return 1.0
        covariances[k] = _product_at_lag(away, k)
        if found:
            continue
        first_squares += away[k] * away[k]
        last_squares += away[n - 1 - k] * away[n - 1 - k]
        scale = math.sqrt(max(squares - first_squares, 0.0) * max(squares - last_squares, 0.0))
        quiet = quiet + 1 if abs(covariances[k]) < bound * scale else 0
        if quiet == runs and k < lags:
            found = True
            window = min(2 * (k - runs + 1), lags)
    weighted = 0.0
    total = covariances[0] / n
    for k in range(1, window + 1):
        flat = min(1.0, 2.0 * (1.0 - k / window))
        weighted += 2.0 * flat * k * covariances[k] / n
        total += 2.0 * flat * covariances[k] / n
    if total == 0.0:
        return default_length(n)
    best = (1.5 * (weighted / total) ** 2 * n) ** (1.0 / 3.0)
    return min(best, float(most))


@compiled
def _product_at_lag(away: Values, lag: int) -> float:
    """Σ away[i] · away[i + lag], four sums side by side."""
    s0 = s1 = s2 = s3 = 0.0
    stop = away.size - lag
    i = 0
    while i + 4 <= stop:
        s0 += away[i] * away[i + lag]
        s1 += away[i + 1] * away[i + lag + 1]
        s2 += away[i + 2] * away[i + lag + 2]
        s3 += away[i + 3] * away[i + lag + 3]
        i += 4
    while i < stop:
        s0 += away[i] * away[i + lag]
        i += 1
    return (s0 + s1) + (s2 + s3)
