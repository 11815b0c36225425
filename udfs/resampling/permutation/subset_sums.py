"""Sums over random subsets of one size, and sums with random signs, without shuffling anything.

A subset of exactly m of n values, all equally likely, is drawn in two steps. Each value enters
with probability j/2ᵇ near m/n, sixty-four values at a time: b random words, joined by AND and OR.
Then so many random members leave, or random others enter, that m remain. Both steps treat all
values alike, so every subset of m values is equally likely.

Sums come from tables: a block of 64 values is eight bytes of a word of bits, and for each byte
the sums of its 256 subsets are tabulated once for all resamples (the method of four Russians,
Arlazarov, Dinic, Kronrod & Faradžev 1970). When m is small beside n nothing is tabulated, and the
m members are drawn one by one.
"""

import functools
import math
from collections.abc import Callable
from typing import Final

import numpy as np

from midspread.udfs.compiling import compile_driver
from midspread.udfs.declaring import Values, compiled
from midspread.udfs.drivers import DONE, STOP, Indices
from midspread.udfs.resampling.permutation.orders import Words
from midspread.udfs.resampling.randomness import below, stream, word

SUBSETS: Final = 0
STUDENTIZED_SUBSETS: Final = 1
SIGNS: Final = 2
_SQUARES: Final = 3

_BYTES: Final = 8
_TABLE: Final = 256 * _BYTES
_FINEST: Final = 12
# Rough costs, in nanoseconds, of a random word, of summing a block, of one value drawn by itself.
_WORD: Final = 1.0
_BLOCK: Final = 4.0
_SINGLE: Final = 40.0
_MOVING: Final = 1
_EPSILON: Final = 2.0**-52

_M1: Final = np.uint64(0x5555555555555555)
_M2: Final = np.uint64(0x3333333333333333)
_M4: Final = np.uint64(0x0F0F0F0F0F0F0F0F)
_H: Final = np.uint64(0x0101010101010101)
_ALL: Final = np.uint64(0xFFFFFFFFFFFFFFFF)


@compiled
def bits_set(w: np.uint64) -> int:
    """Number of ones in a word."""
    w = w - ((w >> np.uint64(1)) & _M1)
    w = (w & _M2) + ((w >> np.uint64(2)) & _M2)
    w = (w + (w >> np.uint64(4))) & _M4
    return int((w * _H) >> np.uint64(56))


@compiled
def digits_worth_drawing(n: int, m: int) -> tuple[int, int]:
    """b and j of the probability j/2ᵇ with the least work for m of n; (0, 0) for one by one."""
    digits = numerator = 0
    lowest = m * _SINGLE
    for b in range(1, _FINEST + 1):
        j = int(math.floor(m / n * 2.0**b + 0.5))
        p = j / 2.0**b
        if j % 2 == 1 and p <= 0.5:
            left = abs(n * p - m) + math.sqrt(n * p * (1.0 - p))
            cost = n / 64 * (_WORD * b + _BLOCK) + left * _SINGLE * 2
            if cost < lowest:
                lowest, digits, numerator = cost, b, j
    return digits, numerator


@compiled
def base_word(key: np.uint64, place: int, digits: int, numerator: int) -> np.uint64:
    """Word number `place` of bits that are each 1 with probability numerator / 2^digits."""
    bits = np.uint64(0)
    for t in range(digits):  # from the last binary digit to the first
        drawn = word(key, place * digits + t)
        bits = (bits | drawn) if (numerator >> t) & 1 else (bits & drawn)
    return bits


@compiled
def _fill_table(
    x: Values, start: int, origin: float, scale: float, kind: int, table: Values
) -> None:
    """The sums of all subsets of each eight of 64 values, of their squares, or with signs ±."""
    for byte in range(_BYTES):
        first = byte * 256
        table[first] = 0.0
        for j in range(8):
            i = start + byte * 8 + j
            v = (x[i] - origin) * scale if i < x.size else 0.0
            if kind == _SQUARES:
                v *= v
            half = 1 << j
            if kind == SIGNS:
                for q in range(first, first + half):
                    table[q + half] = table[q] + v
                    table[q] -= v
            else:
                for q in range(first, first + half):
                    table[q + half] = table[q] + v


@compiled
def _looked_up(table: Values, bits: np.uint64) -> float:
    byte = np.uint64(255)
    t0 = table[bits & byte] + table[np.uint64(256) + ((bits >> np.uint64(8)) & byte)]
    t1 = (
        table[np.uint64(512) + ((bits >> np.uint64(16)) & byte)]
        + table[np.uint64(768) + ((bits >> np.uint64(24)) & byte)]
    )
    t2 = (
        table[np.uint64(1024) + ((bits >> np.uint64(32)) & byte)]
        + table[np.uint64(1280) + ((bits >> np.uint64(40)) & byte)]
    )
    t3 = (
        table[np.uint64(1536) + ((bits >> np.uint64(48)) & byte)]
        + table[np.uint64(1792) + (bits >> np.uint64(56))]
    )
    return (t0 + t1) + (t2 + t3)


@compiled
def _draw_words(
    keys: Words, place: int, digits: int, numerator: int, valid: np.uint64, bits: Words
) -> None:
    """`base_word` for every key at once: a loop without branches, which compiles to vectors."""
    first = place * digits
    for r in range(keys.size):
        bits[r] = word(keys[r], first) & valid  # the last digit of an odd numerator is 1
    for t in range(1, digits):
        i = first + t
        if (numerator >> t) & 1:
            for r in range(keys.size):
                bits[r] |= word(keys[r], i) & valid
        else:
            for r in range(keys.size):
                bits[r] &= word(keys[r], i)


@compiled
def _add_tabulated(
    x: Values,
    origin: float,
    scale: float,
    digits: int,
    numerator: int,
    mode: int,
    keys: Words,
    members: Indices,
    sums: Values,
    squares: Values,
    control: Indices,
) -> None:
    """Add the sums of random subsets into which each value enters with one probability."""
    n = x.size
    table = np.empty(_TABLE)
    bits = np.empty(keys.size, np.uint64)
    kinds = 2 if mode == STUDENTIZED_SUBSETS else 1
    for start in range(0, n, 64):
        if control[STOP] != 0:
            return
        stop = min(start + 64, n)
        valid = _ALL >> np.uint64(64 - (stop - start))
        _draw_words(keys, start >> 6, digits, numerator, valid, bits)
        for r in range(keys.size):
            members[r] += bits_set(bits[r])
        for what in range(kinds):
            _fill_table(x, start, origin, scale, mode if what == 0 else _SQUARES, table)
            filled = sums if what == 0 else squares
            for r in range(keys.size):
                filled[r] += _looked_up(table, bits[r])
        control[DONE] += (stop - start) * keys.size


@compiled
def _differing_places(
    key: np.uint64,
    digits: int,
    numerator: int,
    wanted: int,
    enters: bool,
    n: int,
    moved: Words,
    places: Indices,
) -> None:
    """So many places, all equally likely, of values that are no members (or are, to leave)."""
    moving = stream(key, _MOVING)
    drawn = found = 0
    while found < wanted:
        i = below(moving, drawn, n)
        drawn += 1
        place, bit = i >> 6, np.uint64(1) << np.uint64(i & 63)
        is_member = (base_word(key, place, digits, numerator) & bit) != np.uint64(0)
        if is_member != enters and not moved[place] & bit:
            moved[place] |= bit
            places[found] = i
            found += 1
    for i in range(found):
        moved[places[i] >> 6] = np.uint64(0)


@compiled
def _add_members(
    x: Values,
    origin: float,
    scale: float,
    m: int,
    mode: int,
    keys: Words,
    sums: Values,
    squares: Values,
    control: Indices,
) -> None:
    """Add to sums[r] the sum of a random subset of m values of x, one for each key."""
    n = x.size
    digits, numerator = digits_worth_drawing(n, m)
    if mode == SIGNS:
        digits, numerator = 1, 1
    members = np.zeros(keys.size, np.int64)
    if digits > 0:
        _add_tabulated(
            x, origin, scale, digits, numerator, mode, keys, members, sums, squares, control
        )
    if mode == SIGNS:
        return
    moved = np.zeros((n >> 6) + 1, np.uint64)
    places = np.empty(n, np.int64)
    for r in range(keys.size):
        if control[STOP] != 0:
            return
        enters = members[r] < m
        wanted = abs(members[r] - m)
        _differing_places(keys[r], digits, numerator, wanted, enters, n, moved, places)
        total = total_squares = 0.0
        for i in range(wanted):  # apart from the drawing, so that the loads do not wait in turn
            v = (x[places[i]] - origin) * scale
            total += v
            total_squares += v * v
        sign = 1.0 if enters else -1.0
        sums[r] += sign * total
        squares[r] += sign * total_squares
        if digits == 0:
            control[DONE] += n


@compiled
def _squared_error(total: float, squares: float, n: float) -> float:
    """Variance over n of n values from their sum and their sum of squares."""
    rest = squares - total * total / n
    if rest <= 8.0 * _EPSILON * squares:  # nothing but rounding is left
        return 0.0
    return rest / (n - 1.0) / n


def _mean_differences(
    values: Values,
    starts: Indices,
    strata: Indices,
    first_stratum: Indices,
    chosen: Indices,
    origins: Values,
    scales: Values,
    keys: Words,
    mode: int,
    groups: Indices,
    first: Indices,
    last: Indices,
    target: Indices,
    draws: Values,
    control: Indices,
) -> None:
    """Differences of means (or means with random signs) of resamples first[i] ≤ r < last[i].

    Group g holds values[starts[g] : starts[g + 1]] and strata first_stratum[g] …
    first_stratum[g + 1] − 1; stratum s values[strata[s] : strata[s + 1]], of which chosen[s] get
    the second label. All is in units of x · scales[g].
    """
    for job in range(groups.size):
        if control[STOP] != 0:
            return
        g = groups[job]
        count = last[job] - first[job]
        origin, scale = origins[g], scales[g]
        mine = np.empty(count, np.uint64)
        sums, squares = np.zeros(count), np.zeros(count)
        part, part_squares = np.zeros(count), np.zeros(count)
        ones = 0
        all_sum = all_squares = 0.0
        for s in range(first_stratum[g], first_stratum[g + 1]):
            x = values[strata[s] : strata[s + 1]]
            n, m = x.size, chosen[s]
            ones += m
            for r in range(count):
                own = stream(keys[g], first[job] + r)
                mine[r] = stream(own, s - first_stratum[g])
                part[r] = part_squares[r] = 0.0
            _add_members(x, origin, scale, min(m, n - m), mode, mine, part, part_squares, control)
            total = total_squares = 0.0
            for i in range(n):
                v = (x[i] - origin) * scale
                total += v
                total_squares += v * v
            all_sum += total
            all_squares += total_squares
            rest_is_drawn = 2 * m > n and mode != SIGNS
            for r in range(count):  # array expressions take a second more to compile
                sums[r] += total - part[r] if rest_is_drawn else part[r]
                squares[r] += total_squares - part_squares[r] if rest_is_drawn else part_squares[r]
        n1 = float(ones)
        size = float(starts[g + 1] - starts[g])
        n0 = size - n1
        for r in range(count):
            if mode == SIGNS:
                draws[target[job] + r] = sums[r] / size
                continue
            difference = sums[r] / n1 - (all_sum - sums[r]) / n0
            if mode == STUDENTIZED_SUBSETS:
                error = math.sqrt(
                    _squared_error(sums[r], squares[r], n1)
                    + _squared_error(all_sum - sums[r], all_squares - squares[r], n0)
                )
                difference = 0.0 if difference == 0.0 else difference / error
            draws[target[job] + r] = difference


@functools.cache
def mean_differences() -> Callable[..., None]:
    """The compiled loop; see `_mean_differences`."""
    return compile_driver(
        _mean_differences,
        {},
        "permuted_mean_differences",
        "void(float64[::1], int64[::1], int64[::1], int64[::1], int64[::1], float64[::1], "
        "float64[::1], uint64[::1], int64, int64[::1], int64[::1], int64[::1], int64[::1], "
        "float64[::1], int64[::1])",
    )
