"""Differences of medians and quantiles over rearranged labels, without rearranging the values.

With labels rearranged, the values of one label are a random subset of the sorted values. Where its
k-th smallest value stands is found by halving: how many of a stretch's members lie in its lower
half is hypergeometric. Halves have random streams of their own, numbered as in a heap, so that all
ranks of an arrangement speak of the same subset.
"""

import functools
from collections.abc import Callable
from typing import Any, Final

import numpy as np

from midspread.udfs.declaring import Values, compiled, declared
from midspread.udfs.drivers import DONE, STOP, Indices
from midspread.udfs.resampling.permutation.orders import Words
from midspread.udfs.resampling.randomness import stream
from midspread.udfs.resampling.statistics import compiled_for, statistic
from midspread.udfs.resampling.variates import hypergeometric, next_uniform

_WALKED: Final = 64
"""Stretches of so many values are gone through one by one."""
_AT_ONCE: Final = 64
"""Arrangements from one look at the request to stop to the next."""


@compiled
def place_of(own: np.uint64, n: int, members: int, rank: int, is_member: bool) -> int:
    """Where the member, or the other value, of this rank (from 1) stands in a random subset."""
    low, high, inside = 0, n, members
    node = 1
    while high - low > _WALKED:
        half = (high - low) // 2
        lower, _ = hypergeometric(stream(own, node), inside, high - low, half)
        before = lower if is_member else half - lower
        if rank <= before:
            high, inside, node = low + half, lower, 2 * node
        else:
            rank -= before
            low, inside, node = low + half, inside - lower, 2 * node + 1
    state = stream(own, node)
    for place in range(low, high):
        u, state = next_uniform(state)
        drawn = u * (high - place) < inside
        inside -= drawn
        rank -= drawn == is_member
        if rank == 0:
            return place
    return high - 1  # not reached


def _over_chosen_ranks(
    values: Values,
    starts: Indices,
    sizes: Indices,
    ranks: Indices,
    first_rank: Indices,
    p: Values,
    keys: Words,
    groups: Indices,
    first: Indices,
    last: Indices,
    target: Indices,
    draws: Values,
    control: Indices,
) -> None:
    """The difference of the statistic between two labels, for arrangements drawn at random.

    Parameters
    ----------
    values : ndarray of float64
        Each group's values, sorted.
    sizes : ndarray of int64
        Group g has sizes[2g] values of the first label and sizes[2g + 1] of the second.
    ranks, first_rank : ndarray of int64
        The ranks, from 1, that the statistic reads of label j are
        ranks[first_rank[j] : first_rank[j + 1]].
    """
    for job in range(groups.size):
        g = groups[job]
        x = values[starts[g] : starts[g + 1]]
        members = sizes[2 * g + 1]
        figures = np.empty(2)
        y = np.zeros(max(members, x.size - members))
        finished = 0
        for r in range(first[job], last[job]):
            if r % _AT_ONCE == 0 and control[STOP] != 0:
                return
            own = stream(keys[g], r)
            for j in range(2):
                for i in range(first_rank[2 * g + j], first_rank[2 * g + j + 1]):
                    y[ranks[i] - 1] = x[place_of(own, x.size, members, ranks[i], j == 1)]
                figures[j] = statistic(y[: sizes[2 * g + j]], p)
            draws[target[job] + r - first[job]] = figures[1] - figures[0]
            finished += 1
            if finished == _AT_ONCE or r == last[job] - 1:
                control[DONE] += finished * x.size
                finished = 0


@functools.cache
def over_chosen_ranks(name: str) -> Callable[..., Any]:
    """The compiled loop for one statistic; see `_over_chosen_ranks`."""
    return compiled_for(
        _over_chosen_ranks,
        declared()[name],
        "void(float64[::1], int64[::1], int64[::1], int64[::1], int64[::1], float64[::1], "
        "uint64[::1], int64[::1], int64[::1], int64[::1], int64[::1], float64[::1], int64[::1])",
    )
