"""Orders of a list, drawn at random or one after the other, within strata."""

import numpy as np
import numpy.typing as npt

from midspread.udfs.declaring import compiled
from midspread.udfs.drivers import Indices
from midspread.udfs.resampling.randomness import below, stream

Codes = npt.NDArray[np.int32]
Words = npt.NDArray[np.uint64]


@compiled
def shuffle(codes: Codes, start: int, stop: int, key: np.uint64) -> None:
    """Put codes[start:stop] into a random order (Fisher & Yates 1938; Durstenfeld 1964)."""
    for last in range(stop - 1, start, -1):
        i = start + below(key, last - start, last - start + 1)
        codes[last], codes[i] = codes[i], codes[last]


@compiled
def next_order(codes: Codes, start: int, stop: int) -> bool:
    """Go to the next distinct order of codes[start:stop] (Knuth 4A, 7.2.1.2 L).

    After the last order it starts again with the first, ascending one, and answers False.
    """
    i = stop - 2
    while i >= start and codes[i] >= codes[i + 1]:
        i -= 1
    low, high = i + 1, stop - 1
    if i >= start:
        j = high
        while codes[j] <= codes[i]:
            j -= 1
        codes[i], codes[j] = codes[j], codes[i]
    while low < high:
        codes[low], codes[high] = codes[high], codes[low]
        low += 1
        high -= 1
    return i >= start


@compiled
def arrange(
    codes: Codes,
    start: Codes,
    strata: Indices,
    first: int,
    number: int,
    key: np.uint64,
    exact: bool,
) -> None:
    """Arrangement number r of the codes of one group, each stratum by itself.

    Parameters
    ----------
    codes : ndarray of int32
        Changed. When all arrangements are enumerated it holds the one before.
    start : ndarray of int32
        The first arrangement: ascending within each stratum.
    strata : ndarray of int64
        Ends of the group's strata, as places in a longer list, and before them their start.
    first : int
        Place of the group's first code in that list.
    number : int
        r, from 0 on.
    key : uint64
        The group's stream.
    exact : bool
        Whether all are enumerated; else number r is drawn at random.
    """
    if number == 0 or not exact:
        for i in range(codes.size):
            codes[i] = start[i]
    if exact:
        if number > 0:
            for s in range(strata.size - 1):
                if next_order(codes, strata[s] - first, strata[s + 1] - first):
                    break
        return
    own = stream(key, number)
    for s in range(strata.size - 1):
        shuffle(codes, strata[s] - first, strata[s + 1] - first, stream(own, s))


@compiled
def number_of_arrangements(counts: Indices, limit: float) -> float:
    """Distinct orders of a list with counts[i] copies of code i; infinite beyond the limit."""
    total = 1.0
    size = 0
    for count in counts:
        fewer = min(size, count)
        ways = 1.0
        for i in range(1, fewer + 1):
            # Whole at every step, and exact: both factors stay far below 2⁵³.
            ways = ways * (size + count - fewer + i) / i
            if ways > limit:
                return np.inf
        total *= ways
        if total > limit:
            return np.inf
        size += count
    return total
