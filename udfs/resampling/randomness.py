"""Random numbers that depend on a seed and on the data alone.

Counter-based: number i of a stream is a fixed function of the stream's key and i, so results do
not depend on threads, batches or the order of calls. The mixing function is SplitMix64 (Steele,
Lea & Flood 2014).
"""

from typing import Final

import numpy as np

from midspread.udfs.declaring import Values, compiled
from midspread.udfs.parameters import Parameter

SEED: Final = Parameter(
    "seed", "chooses the random numbers", default=0, low=0, high=2.0**53, whole=True
)

_GOLDEN: Final = np.uint64(0x9E3779B97F4A7C15)
_FIRST: Final = np.uint64(0xBF58476D1CE4E5B9)
_SECOND: Final = np.uint64(0x94D049BB133111EB)
_UNIT: Final = 2.0**-53


@compiled
def mixed(z: np.uint64) -> np.uint64:
    """SplitMix64's finaliser: a bijection of 64 bits that leaves no pattern."""
    z = (z ^ (z >> np.uint64(30))) * _FIRST
    z = (z ^ (z >> np.uint64(27))) * _SECOND
    return z ^ (z >> np.uint64(31))


@compiled
def content_key(x: Values) -> np.uint64:
    """A key made of the values themselves, in the order given: sort them first."""
    words = x.view(np.uint64)
    key = mixed(np.uint64(x.size) + _GOLDEN)
    for i in range(words.size):
        key = mixed(key ^ words[i]) + _GOLDEN
    return key


@compiled
def stream(key: np.uint64, number: int) -> np.uint64:
    """The key of a stream of its own: one for each seed, group, resample or purpose."""
    return mixed(key ^ mixed(np.uint64(number) + _GOLDEN))


@compiled
def word(key: np.uint64, i: int) -> np.uint64:
    """Random word i of a stream."""
    return mixed(key + np.uint64(i + 1) * _GOLDEN)


@compiled
def uniform(key: np.uint64, i: int) -> float:
    """Random number i of a stream, uniform on [0, 1), a multiple of 2⁻⁵³."""
    return np.float64(word(key, i) >> np.uint64(11)) * _UNIT


@compiled
def below(key: np.uint64, i: int, n: int) -> int:
    """Random whole number i of a stream, 0 ≤ number < n; off uniform by at most n · 2⁻⁵³."""
    return int(uniform(key, i) * n)
