"""How often each row of a group is drawn when as many are drawn as there are, row by row.

The counts of a group are multinomial: n draws, each row as likely as any other. They are drawn by
halving: how many of the draws fall into the first part of a range is binomial, and each part is
halved in turn, down to blocks of `BLOCK` rows within which single draws are made. Every part has
random numbers of its own, keyed by its place. The counts of some rows of a resample can so be had
without those of the others, in any order, and always come out the same.
"""

from typing import Final

import numpy as np
import numpy.typing as npt

from midspread.udfs.declaring import compiled
from midspread.udfs.drivers import DONE, STOP, Indices
from midspread.udfs.resampling.randomness import below, stream, word
from midspread.udfs.resampling.variates import binomial

Counts = npt.NDArray[np.int32]
Keys = npt.NDArray[np.uint64]

BLOCK: Final = 64
"""Rows of a part that is not halved any more. Another number gives other draws."""

_BITS: Final = np.uint64(6)
_MASK: Final = np.uint64(BLOCK - 1)
_IN_A_WORD: Final = 10
_DEEPEST: Final = 64


@compiled
def first_part(size: int) -> int:
    """Where a range is cut in two: the largest power of 2 below its size, in whole blocks."""
    part = BLOCK
    while 2 * part < size:
        part *= 2
    return part


@compiled
def count_positions(key: np.uint64, n: int, positions: Indices, counts: Counts) -> None:
    """How often each of some positions, ascending from 0, is among n draws out of 0 … n − 1.

    Parameters
    ----------
    key : uint64
        The key of this resample.
    n : int
        How many positions there are, and how many draws.
    positions : ndarray of int64
        Those asked for; repeated ones get the same count.
    counts : ndarray of int32
        One count for each of them is written here.
    """
    within = np.zeros(BLOCK, dtype=np.int32)
    starts = np.empty(_DEEPEST, dtype=np.int64)
    sizes = np.empty(_DEEPEST, dtype=np.int64)
    draws = np.empty(_DEEPEST, dtype=np.int64)
    places = np.empty(_DEEPEST, dtype=np.uint64)
    starts[0], sizes[0], draws[0], places[0] = 0, n, n, np.uint64(1)
    depth = 1
    i = 0
    while depth > 0 and i < positions.size:
        depth -= 1
        start, size, drawn, place = starts[depth], sizes[depth], draws[depth], places[depth]
        if positions[i] >= start + size:
            continue  # nothing is asked for in here
        own = stream(key, place)
        if size > BLOCK:
            part = first_part(size)
            left, _ = binomial(own, drawn, part / size)
            # The second part waits below the first.
            starts[depth], sizes[depth] = start + part, size - part
            draws[depth], places[depth] = drawn - left, np.uint64(2) * place + np.uint64(1)
            starts[depth + 1], sizes[depth + 1] = start, part
            draws[depth + 1], places[depth + 1] = left, np.uint64(2) * place
            depth += 2
            continue
        within[:] = 0
        if size == BLOCK:
            _draw_in_block(own, drawn, within)
        else:
            for d in range(drawn):
                within[np.uint64(below(own, d, size))] += 1
        while i < positions.size and positions[i] < start + size:
            counts[i] = within[positions[i] - start]
            i += 1


@compiled
def _draw_in_block(key: np.uint64, draws: int, counts: Counts) -> None:
    """Count draws out of a whole block: ten numbers below 64 from each random word."""
    left = draws
    number = 0
    while left > 0:
        bits = word(key, number)
        number += 1
        for _ in range(min(left, _IN_A_WORD)):
            counts[bits & _MASK] += 1
            bits >>= _BITS
        left -= _IN_A_WORD


def count_rows(
    keys: Keys,
    sizes: Indices,
    positions: Indices,
    seeds: Keys,
    first: int,
    counts: npt.NDArray[np.int32],
    control: Indices,
) -> None:
    """How often each row is drawn in resamples ``first``, ``first + 1``, …: one line each.

    Rows of one group (equal keys and sizes) that stand together, with positions ascending, are
    counted together.
    """
    row = 0
    total = keys.size
    while row < total:
        end = row + 1
        while (
            end < total
            and keys[end] == keys[row]
            and sizes[end] == sizes[row]
            and positions[end] >= positions[end - 1]
        ):
            end += 1
        key = stream(keys[row], seeds[row])
        for r in range(counts.shape[0]):
            if control[STOP] != 0:
                return
            own = counts[r, row:end]
            count_positions(stream(key, first + r), sizes[row], positions[row:end], own)
        control[DONE] += end - row
        row = end


def write_resamples(
    counts: npt.NDArray[np.int32], first: int, ends: npt.NDArray[np.int32], out: Counts
) -> None:
    """The numbers of the resamples that each row is drawn in, once for each time it is drawn.

    Parameters
    ----------
    counts : ndarray of int32
        As `count_rows` leaves them.
    first : int
        The number of the first resample.
    ends : ndarray of int32, shape (rows + 1,)
        Row i writes ``out[ends[i] : ends[i + 1]]``.
    """
    for row in range(counts.shape[1]):
        at = ends[row]
        for r in range(counts.shape[0]):
            for _ in range(counts[r, row]):
                out[at] = first + r
                at += 1
