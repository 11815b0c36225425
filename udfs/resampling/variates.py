"""Random variates drawn from a counter-based stream: whole numbers, binomial counts, ranks.

Every function takes the state of a stream (at first its key, see `randomness`) and returns the
state behind the words it used up.
"""

import math
from typing import Final

import numpy as np

from midspread.udfs.declaring import compiled
from midspread.udfs.resampling.randomness import mixed

GOLDEN: Final = np.uint64(0x9E3779B97F4A7C15)
"""Added to the state for each word, as `randomness.word` does."""
LOW_HALF: Final = np.uint64(0xFFFFFFFF)
HALF: Final = np.uint64(32)

_SHIFT: Final = np.uint64(11)
_UNIT: Final = 2.0**-53
_FEW: Final = 10.0
"""Below this mean a binomial count is found by inversion."""
_STIRLING: Final = (
    0.08106146679532726,
    0.04134069595540929,
    0.02767792568499834,
    0.02079067210376509,
    0.01664469118982119,
    0.01387612882307075,
    0.01189670994589177,
    0.01041126526197209,
    0.009255462182712733,
    0.008330563433362871,
)
"""ln k! minus Stirling's formula for k = 0 … 9."""


@compiled
def next_uniform(state: np.uint64) -> tuple[float, np.uint64]:
    """A random number between 0 and 1, neither included, and the new state."""
    state = state + GOLDEN
    return (np.float64(mixed(state) >> _SHIFT) + 0.5) * _UNIT, state


@compiled
def next_normal(state: np.uint64) -> tuple[float, np.uint64]:
    """A standard normal number (Box & Muller 1958), and the new state."""
    u, state = next_uniform(state)
    v, state = next_uniform(state)
    return math.sqrt(-2.0 * math.log(u)) * math.cos(2.0 * math.pi * v), state


@compiled
def _stirling(k: float) -> float:
    """What Stirling's formula lacks of ln k!."""
    if k < 10.0:
        return _STIRLING[int(k)]
    square = (k + 1.0) * (k + 1.0)
    return (1.0 / 12 - (1.0 / 360 - 1.0 / 1260 / square) / square) / (k + 1.0)


@compiled
def binomial(state: np.uint64, n: int, p: float) -> tuple[int, np.uint64]:
    """A binomial count: inversion for small means, else transformed rejection (Hörmann 1993)."""
    if n <= 0 or p <= 0.0:
        return 0, state
    if p >= 1.0:
        return n, state
    k, state = _binomial_below_half(state, n, min(p, 1.0 - p))
    return (n - k if p > 0.5 else k), state


@compiled
def _binomial_below_half(state: np.uint64, n: int, p: float) -> tuple[int, np.uint64]:
    mean = n * p
    q = 1.0 - p
    odds = p / q
    if mean < _FEW:
        start = math.exp(n * math.log1p(-p))
        while True:
            u, state = next_uniform(state)
            mass = start
            k = 0
            while u > mass and k <= n:
                u -= mass
                k += 1
                mass *= odds * (n - k + 1) / k
            if k <= n:
                return k, state
    spread = math.sqrt(mean * q)
    b = 1.15 + 2.53 * spread
    a = -0.0873 + 0.0248 * b + 0.01 * p
    c = mean + 0.5
    sure = 0.92 - 4.2 / b
    alpha = (2.83 + 5.1 / b) * spread
    mode = np.floor((n + 1) * p)
    while True:
        u, state = next_uniform(state)
        v, state = next_uniform(state)
        u -= 0.5
        room = 0.5 - abs(u)
        rank = np.floor((2.0 * a / room + b) * u + c)
        if room >= 0.07 and v <= sure:
            return int(rank), state
        if rank < 0.0 or rank > n:
            continue
        v = math.log(v * alpha / (a / (room * room) + b))
        bound = (
            (mode + 0.5) * math.log((mode + 1.0) / (odds * (n - mode + 1.0)))
            + (n + 1.0) * math.log((n - mode + 1.0) / (n - rank + 1.0))
            + (rank + 0.5) * math.log(odds * (n - rank + 1.0) / (rank + 1.0))
            + _stirling(mode)
            + _stirling(n - mode)
            - _stirling(rank)
            - _stirling(n - rank)
        )
        if v <= bound:
            return int(rank), state


@compiled
def hypergeometric(state: np.uint64, members: int, size: int, drawn: int) -> tuple[int, np.uint64]:
    """How many of so many members are among half, or less, of size values drawn without return.

    By rejection from the binomial count: with members no more than half of all, more than two of
    three are kept.
    """
    k, state = _hypergeometric_of_few(state, min(members, size - members), size, drawn)
    return (drawn - k if 2 * members > size else k), state


@compiled
def _hypergeometric_of_few(
    state: np.uint64, members: int, size: int, drawn: int
) -> tuple[int, np.uint64]:
    if members == 0:
        return 0, state
    p = drawn / size
    logit = math.log(drawn / (size - drawn))
    # The ratio of both chances is largest here.
    best = -(-(drawn * (members - 1)) // size)
    rest = size - drawn - members
    while True:
        k, state = binomial(state, members, p)
        u, state = next_uniform(state)
        if k > drawn or rest + k < 0:
            continue
        fits = _log_factorials_apart(drawn - best, drawn - k)
        fits += _log_factorials_apart(rest + best, rest + k) - (k - best) * logit
        if math.log(u) <= fits:
            return k, state


@compiled
def _log_factorials_apart(a: int, b: int) -> float:
    """ln a! − ln b!."""
    away = float(a - b)
    apart = (a + 0.5) * math.log1p(away / (b + 1.0)) + away * (math.log(b + 1.0) - 1.0)
    return apart + _stirling(float(a)) - _stirling(float(b))


@compiled
def uniform_rank(state: np.uint64, k: int, n: int) -> tuple[float, np.uint64]:
    """The k-th smallest of n uniform numbers, 1 ≤ k ≤ n: beta with k and n − k + 1.

    In closed form for the smallest and the largest, else by Cheng's algorithm BB (Cheng 1978).
    """
    if k == 1:
        u, state = next_uniform(state)
        return -math.expm1(math.log(u) / n), state
    if k == n:
        u, state = next_uniform(state)
        return math.exp(math.log(u) / n), state
    a = float(min(k, n - k + 1))
    b = float(max(k, n - k + 1))
    both = a + b
    beta = math.sqrt((both - 2.0) / (2.0 * a * b - both))
    gamma = a + 1.0 / beta
    while True:
        u, state = next_uniform(state)
        v, state = next_uniform(state)
        logit = beta * math.log(u / (1.0 - u))
        w = a * math.exp(logit)
        z = u * u * v
        r = gamma * logit - 1.3862943611198906
        s = a + r - w
        if s + 2.6094379124341003 < 5.0 * z:
            t = math.log(z)
            if s < t and r + both * math.log(both / (b + w)) < t:
                continue
        return (w if k <= n - k + 1 else b) / (b + w), state
