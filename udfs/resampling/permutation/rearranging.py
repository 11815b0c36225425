"""A statistic over rearranged data, for any statistic: labels, signs or the values of a column.

Values are sorted once. Choosing those with one label keeps their order, so no resample sorts.
"""

import functools
import math
from collections.abc import Callable
from typing import Any, Final

import numpy as np

from midspread.udfs.compiling import compile_driver
from midspread.udfs.declaring import Values, compiled, declared
from midspread.udfs.drivers import DONE, STOP, Indices
from midspread.udfs.location.trimming import trimmed_mean
from midspread.udfs.resampling.permutation.orders import Codes, Words, arrange
from midspread.udfs.resampling.randomness import stream, word
from midspread.udfs.resampling.statistics import compiled_for, statistic
from midspread.udfs.scale.winsorized import trimmed_mean_se

DIFFERENCE: Final = 0
BETWEEN: Final = 1


@compiled
def between_labels(figures: Values, sizes: Values) -> float:
    """Σ n_j (s_j − s̄)², s̄ = Σ n_j s_j / Σ n_j."""
    # From the first figure on: a common shift costs no digits.
    origin = figures[0]
    total = centre = 0.0
    for j in range(figures.size):
        total += sizes[j]
        centre += sizes[j] * (figures[j] - origin)
    centre /= total
    squares = 0.0
    for j in range(figures.size):
        away = (figures[j] - origin) - centre
        squares += sizes[j] * away * away
    return squares


@compiled
def _collect(x: Values, labels: Codes, ends: Indices, sorted_by_label: Values) -> None:
    """Copy the values label by label, in the order they have; ends[j] becomes the end of label j.

    Parameters
    ----------
    ends : ndarray of int64
        The start of each label's part.
    """
    for i in range(x.size):
        label = labels[i]
        sorted_by_label[ends[label]] = x[i]
        ends[label] += 1


def _over_labels(
    values: Values,
    starts: Indices,
    codes: Codes,
    strata: Indices,
    first_stratum: Indices,
    places: Indices,
    sizes: Indices,
    first_label: Indices,
    p: Values,
    kind: int,
    exact: Indices,
    keys: Words,
    groups: Indices,
    first: Indices,
    last: Indices,
    target: Indices,
    draws: Values,
    control: Indices,
) -> None:
    """The statistic that compares labels, for arrangements first[i] ≤ r < last[i] of a group.

    Parameters
    ----------
    values : ndarray of float64
        Each group's values, sorted; group g from starts[g] to starts[g + 1].
    codes : ndarray of int32
        Each group's labels as 0, 1, …: stratum by stratum, ascending within each.
    strata, first_stratum : ndarray of int64
        Group g has strata first_stratum[g] … first_stratum[g + 1] − 1; stratum s has
        codes[strata[s] : strata[s + 1]].
    places : ndarray of int64
        Which of its group's sorted values each code stands for; empty when it is its own place.
    sizes, first_label : ndarray of int64
        Numbers of values of each label; those of group g start at first_label[g].
    """
    for job in range(groups.size):
        g = groups[job]
        a, b = starts[g], starts[g + 1]
        x, start = values[a:b], codes[a:b]
        own_strata = strata[first_stratum[g] : first_stratum[g + 1] + 1]
        own_sizes = sizes[first_label[g] : first_label[g + 1]]
        weights = own_sizes.astype(np.float64)
        figures, ends = np.empty(own_sizes.size), np.empty(own_sizes.size, np.int64)
        arranged, labels = start.copy(), start.copy()
        chosen = np.empty(x.size)
        is_placed = own_strata.size > 2
        for r in range(first[job], last[job]):
            if control[STOP] != 0:
                return
            arrange(arranged, start, own_strata, a, r, keys[g], exact[g] != 0)
            if is_placed:
                for i in range(x.size):
                    labels[places[a + i]] = arranged[i]
            filled = 0
            for j in range(ends.size):
                ends[j] = filled
                filled += own_sizes[j]
            _collect(x, labels if is_placed else arranged, ends, chosen)
            for j in range(ends.size):
                figures[j] = statistic(chosen[ends[j] - own_sizes[j] : ends[j]], p)
            if kind == BETWEEN:
                draws[target[job] + r - first[job]] = between_labels(figures, weights)
            else:
                draws[target[job] + r - first[job]] = figures[1] - figures[0]
            control[DONE] += x.size


def _studentized_over_labels(
    values: Values,
    starts: Indices,
    codes: Codes,
    strata: Indices,
    first_stratum: Indices,
    places: Indices,
    sizes: Indices,
    first_label: Indices,
    p: Values,
    kind: int,
    exact: Indices,
    keys: Words,
    groups: Indices,
    first: Indices,
    last: Indices,
    target: Indices,
    draws: Values,
    control: Indices,
) -> None:
    """As `_over_labels`: the difference of trimmed means divided by its standard error."""
    share = p[0]
    for job in range(groups.size):
        g = groups[job]
        a, b = starts[g], starts[g + 1]
        x, start = values[a:b], codes[a:b]
        own_strata = strata[first_stratum[g] : first_stratum[g + 1] + 1]
        zeros = sizes[first_label[g]]
        ends = np.empty(2, np.int64)
        arranged, labels = start.copy(), start.copy()
        chosen = np.empty(x.size)
        is_placed = own_strata.size > 2
        for r in range(first[job], last[job]):
            if control[STOP] != 0:
                return
            arrange(arranged, start, own_strata, a, r, keys[g], exact[g] != 0)
            if is_placed:
                for i in range(x.size):
                    labels[places[a + i]] = arranged[i]
            ends[0], ends[1] = 0, zeros
            _collect(x, labels if is_placed else arranged, ends, chosen)
            low, high = chosen[:zeros], chosen[zeros:]
            draws[target[job] + r - first[job]] = studentized(
                trimmed_mean(high, share) - trimmed_mean(low, share),
                trimmed_mean_se(high, share),
                trimmed_mean_se(low, share),
            )
            control[DONE] += x.size


@compiled
def studentized(difference: float, error: float, other_error: float) -> float:
    """difference / √(error² + other_error²); a difference of 0 stays 0."""
    if difference == 0.0 and error == 0.0 and other_error == 0.0:
        return 0.0
    return difference / math.hypot(error, other_error)


def _over_signs(
    values: Values,
    starts: Indices,
    p: Values,
    exact: Indices,
    keys: Words,
    groups: Indices,
    first: Indices,
    last: Indices,
    target: Indices,
    draws: Values,
    control: Indices,
) -> None:
    """The statistic of the values with flipped signs; values sorted by their size, then sign."""
    for job in range(groups.size):
        g = groups[job]
        d = values[starts[g] : starts[g + 1]]
        n = d.size
        x, flips = np.empty(n), np.empty(n, np.bool_)
        for r in range(first[job], last[job]):
            if control[STOP] != 0:
                return
            own = stream(keys[g], r)
            bits = np.uint64(r)
            for i in range(n):
                if exact[g] == 0 and i & 63 == 0:
                    bits = word(own, i >> 6)
                flips[i] = (bits >> np.uint64(i & 63)) & np.uint64(1) != np.uint64(0)
            low, high = 0, n - 1
            for i in range(n - 1, -1, -1):  # from the largest size inwards: sorted without a sort
                v = -d[i] if flips[i] else d[i]
                if v < 0.0:
                    x[low] = v
                    low += 1
                else:
                    x[high] = v + 0.0
                    high -= 1
            draws[target[job] + r - first[job]] = statistic(x, p)
            control[DONE] += n


_JOBS: Final = "int64[::1], int64[::1], int64[::1], int64[::1], float64[::1], int64[::1])"
_LABELS: Final = (
    "void(float64[::1], int64[::1], int32[::1], int64[::1], int64[::1], int64[::1], int64[::1], "
    f"int64[::1], float64[::1], int64, int64[::1], uint64[::1], {_JOBS}"
)
_SIGNS: Final = f"void(float64[::1], int64[::1], float64[::1], int64[::1], uint64[::1], {_JOBS}"


@functools.cache
def over_labels(name: str) -> Callable[..., Any]:
    """The compiled loop over rearranged labels for one statistic; see `_over_labels`."""
    return compiled_for(_over_labels, declared()[name], _LABELS)


@functools.cache
def studentized_over_labels() -> Callable[..., Any]:
    """The compiled loop for studentized trimmed means; see `_studentized_over_labels`."""
    return compile_driver(_studentized_over_labels, {}, "studentized_over_labels", _LABELS)


@functools.cache
def over_signs(name: str) -> Callable[..., Any]:
    """The compiled loop over flipped signs for one statistic; see `_over_signs`."""
    return compiled_for(_over_signs, declared()[name], _SIGNS)
