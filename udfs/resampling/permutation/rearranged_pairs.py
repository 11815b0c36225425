"""A statistic of two columns while the values of the second are rearranged against the first."""

import functools
from collections.abc import Callable
from typing import Any

import numpy as np

from midspread.udfs.declaring import Values, compiled, declared
from midspread.udfs.drivers import DONE, STOP, Indices
from midspread.udfs.resampling.permutation.orders import Codes, Words, arrange
from midspread.udfs.resampling.statistics import compiled_for, statistic


@compiled
def _sink(x: Values, root: int, size: int) -> None:
    """Restore the heap below its root."""
    v = x[root]
    while True:
        child = 2 * root + 1
        if child >= size:
            break
        if child + 1 < size and x[child + 1] > x[child]:
            child += 1
        if x[child] <= v:
            break
        x[root] = x[child]
        root = child
    x[root] = v


@compiled
def sort_in_place(x: Values) -> None:
    """Sort a few values or many (heapsort, Williams 1964; Floyd 1964)."""
    for root in range(x.size // 2 - 1, -1, -1):
        _sink(x, root, x.size)
    for size in range(x.size - 1, 0, -1):
        x[0], x[size] = x[size], x[0]
        _sink(x, 0, size)


def _over_pairs(
    ys: Values,
    xs: Values,
    starts: Indices,
    codes: Codes,
    strata: Indices,
    first_stratum: Indices,
    places: Indices,
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
    """The statistic of y with rearranged x; pairs are sorted by y, then x.

    Parameters
    ----------
    codes : ndarray of int32
        0, 1, … within each stratum: the first arrangement.
    places : ndarray of int64
        Places of each stratum's pairs within their group, stratum by stratum.
    """
    for job in range(groups.size):
        g = groups[job]
        a, b = starts[g], starts[g + 1]
        y, x, start, own = ys[a:b], xs[a:b], codes[a:b], places[a:b]
        own_strata = strata[first_stratum[g] : first_stratum[g + 1] + 1]
        arranged, moved = start.copy(), np.empty(x.size)
        for r in range(first[job], last[job]):
            if control[STOP] != 0:
                return
            arrange(arranged, start, own_strata, a, r, keys[g], exact[g] != 0)
            for s in range(own_strata.size - 1):
                at = own_strata[s] - a
                for i in range(at, own_strata[s + 1] - a):
                    moved[own[i]] = x[own[at + arranged[i]]]
            i = 0
            while i < y.size:  # within ties of y the kernel expects x sorted
                end = i + 1
                while end < y.size and y[end] == y[i]:
                    end += 1
                if end > i + 1:
                    sort_in_place(moved[i:end])
                i = end
            draws[target[job] + r - first[job]] = statistic(y, moved, p)
            control[DONE] += x.size


@functools.cache
def over_pairs(name: str) -> Callable[..., Any]:
    """The compiled loop over rearranged pairs for one statistic; see `_over_pairs`."""
    return compiled_for(
        _over_pairs,
        declared()[name],
        "void(float64[::1], float64[::1], int64[::1], int32[::1], int64[::1], int64[::1], "
        "int64[::1], float64[::1], int64[::1], uint64[::1], int64[::1], int64[::1], int64[::1], "
        "int64[::1], float64[::1], int64[::1])",
    )
