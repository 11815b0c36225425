"""From a loop over arrangements to p-values: shared out over threads, in memory of bounded size."""

import functools
import itertools
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from midspread.udfs.binding.computing import Work
from midspread.udfs.compiling import compile_driver
from midspread.udfs.declaring import NULL, Values, null_mask
from midspread.udfs.drivers import Indices
from midspread.udfs.grouped import Stopped, row_numbers
from midspread.udfs.resampling.permutation.cells import in_turn
from midspread.udfs.resampling.permutation.orders import Words
from midspread.udfs.resampling.permutation.parameters import ALTERNATIVES
from midspread.udfs.resampling.randomness import content_key, stream

Flags = npt.NDArray[np.bool_]
Job = tuple[Indices, Indices, Indices, Indices]
Draw = Callable[[Indices, Indices, Indices, Indices, Values], None]
"""A loop: groups, first and last arrangement of each job, where its draws go, the draws."""

RELATIVE_TIE: Final = 1e-12
"""Arrangements within this share of the largest |T| of the observed T count as tied with it."""

ROUNDING: Final = 2.0**-49
"""How far off a statistic may be by rounding, as a share of its size."""

_ROUND: Final = 1 << 21  # draws kept at once
_WORTH_SPLITTING: Final = 1 << 24  # values worked on by one job


@dataclass(frozen=True)
class Question:
    """What is asked of each group.

    Attributes
    ----------
    sizes : ndarray of int64
        Number of values.
    totals : ndarray of int64
        Number of arrangements to go through.
    exact : ndarray of bool
        Whether these are all there are.
    observed : ndarray of float64
        T of the data as they are.
    rounding : ndarray of float64
        How far rounding may take two equal T apart, besides `RELATIVE_TIE`.
    sides : ndarray of int64
        Place of the alternative in `ALTERNATIVES`.
    keys : ndarray of uint64
        Stream of random numbers.
    """

    sizes: Indices
    totals: Indices
    exact: Flags
    observed: Values
    rounding: Values
    sides: Indices
    keys: Words

    def of(self, groups: Indices) -> "Question":
        """The same of some of the groups."""
        return Question(**{name: values[groups] for name, values in vars(self).items()})


class Outcome:
    """The fields of a permutation test for every group of a batch, NULL at first."""

    def __init__(self, size: int) -> None:
        self.estimate = np.full(size, NULL)
        self.p_value = np.full(size, NULL)
        self.resamples = np.full(size, np.nan)
        self.exact = np.full(size, np.nan)

    def fields(self) -> dict[str, Any]:
        """By name."""
        return dict(vars(self))

    def enter_estimates(self, groups: Indices, estimates: Values, observed: Values) -> Flags:
        """Enter the estimates of some groups; True where there is a T to compare.

        Where there is none the p-value is NULL or NaN as T is.
        """
        self.estimate[groups] = estimates
        self.p_value[groups] = np.where(null_mask(observed), NULL, np.nan)
        return ~np.isnan(observed)

    def enter(self, groups: Indices, asked: Question, p_value: Values) -> None:
        """Enter what was found for some groups."""
        self.p_value[groups] = p_value
        self.resamples[groups] = asked.totals
        self.exact[groups] = asked.exact


def p_values(draw: Draw, asked: Question, work: Work, least: int = 1) -> Values:
    """The share of arrangements whose T is at least as extreme as the observed one.

    Parameters
    ----------
    draw : callable
        Fills in T of the arrangements of some jobs.
    asked : Question
        One entry a group.
    work : Work
        Threads, progress and the request to stop.
    least : int
        A job has at least so many arrangements, where there are as many.

    Returns
    -------
    ndarray of float64
        count / total when all arrangements are enumerated, else (count + 1) / (total + 1)
        (Phipson & Smyth 2010). An arrangement without T counts as extreme.
    """
    found = np.full(asked.sizes.size, np.nan)
    for chosen in _rounds(asked.totals):
        totals = asked.totals[chosen]
        places = row_numbers(totals)
        draws = np.empty(int(places[-1]))
        jobs = _jobs(chosen, asked.sizes[chosen], totals, asked.exact[chosen], places, least)
        _share_out(draw, jobs, draws, work)
        counts = np.empty(totals.size)
        _counting()(
            draws,
            places,
            asked.observed[chosen],
            asked.rounding[chosen],
            asked.sides[chosen],
            counts,
        )
        exact = asked.exact[chosen]
        found[chosen] = np.where(exact, counts / totals, (counts + 1.0) / (totals + 1.0))
    return found


def _rounds(totals: Indices) -> Iterator[Indices]:
    """Consecutive groups that have about _ROUND draws together (more where one group has)."""
    start = 0
    ends = np.cumsum(totals)
    while start < totals.size:
        before = ends[start - 1] if start else 0
        stop = max(int(np.searchsorted(ends, before + _ROUND, side="right")), start + 1)
        yield np.arange(start, stop)
        start = stop


def _jobs(
    groups: Indices, sizes: Indices, totals: Indices, exact: Flags, places: Indices, least: int
) -> list[Job]:
    """Portions of jobs of about equal work; a large group is several jobs."""
    chunks = np.maximum(_WORTH_SPLITTING // np.maximum(sizes, 1), least)
    pieces = np.where(exact, 1, -(-totals // chunks))  # enumerating goes step by step
    owner = np.repeat(np.arange(groups.size), pieces)
    number = np.arange(owner.size) - np.repeat(row_numbers(pieces)[:-1], pieces)
    length = np.where(exact[owner], totals[owner], chunks[owner])
    first = number * length
    last = np.minimum(first + length, totals[owner])
    target = places[owner] + first
    weight = np.cumsum((last - first) * sizes[owner])
    bounds = np.searchsorted(
        weight, np.arange(0, int(weight[-1]) + _WORTH_SPLITTING, _WORTH_SPLITTING)
    )
    bounds = np.unique(np.concatenate(([0], bounds, [owner.size])))
    return [
        (groups[owner[a:b]], first[a:b].copy(), last[a:b].copy(), target[a:b].copy())
        for a, b in itertools.pairwise(bounds.tolist())
    ]


def _share_out(draw: Draw, jobs: Sequence[Job], draws: Values, work: Work) -> None:
    """Threads take portions in turn; each fills its own part of the draws."""
    in_turn(lambda portion: draw(*jobs[portion], draws), range(len(jobs)), work)
    if work.control.stopped:
        raise Stopped("stopped on request")


def content_keys(values: Values, offsets: Indices, seeds: Values | Words) -> Words:
    """A stream for each group, made of its values in their order and the seed (or a key)."""
    keys = np.empty(offsets.size - 1, np.uint64)
    _keys()(np.ascontiguousarray(values), offsets, seeds.astype(np.uint64), keys)
    return keys


def side_numbers(alternatives: Sequence[str]) -> Indices:
    """The alternatives as places in `ALTERNATIVES`."""
    return np.array([ALTERNATIVES.index(text) for text in alternatives], dtype=np.int64)


def _content_keys(values: Values, offsets: Indices, seeds: Words, keys: Words) -> None:
    for g in range(keys.size):
        keys[g] = stream(content_key(values[offsets[g] : offsets[g + 1]]), seeds[g])


def _count_extreme(
    draws: Values,
    places: Indices,
    observed: Values,
    rounding: Values,
    sides: Indices,
    counts: Values,
) -> None:
    """How many draws of each group are at least as extreme as the observed T, ties among them."""
    for g in range(counts.size):
        own = draws[places[g] : places[g + 1]]
        t = observed[g]
        largest = abs(t) if np.isfinite(t) else 0.0
        for r in range(own.size):
            if np.isfinite(own[r]):
                largest = max(largest, abs(own[r]))
        tolerance = RELATIVE_TIE * largest + rounding[g]
        count = 0
        for r in range(own.size):
            v = own[r]
            if sides[g] == 0:
                within = abs(v) < abs(t) - tolerance
            elif sides[g] == 1:
                within = v < t - tolerance
            else:
                within = v > t + tolerance
            if not within:  # a draw that is NaN is not within either
                count += 1
        counts[g] = count


@functools.cache
def _counting() -> Callable[..., None]:
    return compile_driver(
        _count_extreme,
        {},
        "count_extreme",
        "void(float64[::1], int64[::1], float64[::1], float64[::1], int64[::1], float64[::1])",
    )


@functools.cache
def _keys() -> Callable[..., None]:
    return compile_driver(
        _content_keys,
        {},
        "content_keys",
        "void(float64[::1], int64[::1], uint64[::1], uint64[::1])",
    )
