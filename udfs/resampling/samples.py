"""Groups made ready for resampling: sorted, with their random keys and the statistic itself."""

import hashlib
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from midspread.udfs.declaring import NULL, Values
from midspread.udfs.drivers import Indices, driver
from midspread.udfs.grouped import Groups, row_numbers
from midspread.udfs.resampling.randomness import mixed
from midspread.udfs.resampling.statistics import Statistic
from midspread.udfs.resampling.variates import GOLDEN

_EMPTY: Final = np.empty(0)


@dataclass(frozen=True)
class Samples:
    """Some groups, one after the other, each sorted; none of them empty.

    Attributes
    ----------
    values : ndarray of float64
        Sorted within each group; −0.0 is 0.0. Of pairs the first column, which sorts them.
    others : ndarray of float64
        Of pairs the second column, sorted within ties of the first; else empty.
    starts, lengths : ndarray of int64
        Where each group starts and how many values it has.
    estimates : ndarray of float64
        The statistic of each group; NaN where it holds NaN, `NULL` where it has none.
    clean : ndarray of bool
        Which groups hold no NaN.
    """

    values: Values
    others: Values
    starts: Indices
    lengths: Indices
    estimates: Values
    clean: npt.NDArray[np.bool_]

    @property
    def size(self) -> int:
        """Number of groups."""
        return self.starts.size


def samples_of(groups: Groups, members: Indices, statistic: Statistic) -> Samples:
    """Sort the chosen groups and compute the statistic of each."""
    lengths = groups.lengths[members]
    ends = row_numbers(lengths)
    values = np.empty(int(ends[-1]))
    others = np.empty(values.size if len(statistic.function.columns) == 2 else 0)
    for place, group in enumerate(members.tolist()):
        rows = slice(int(groups.offsets[group]), int(groups.offsets[group + 1]))
        own = slice(int(ends[place]), int(ends[place + 1]))
        mine = values[own]
        np.add(groups.values[rows], 0.0, out=mine)  # −0.0 becomes 0.0
        if others.size:
            second = groups.weights[rows] + 0.0
            order = np.lexsort((second, mine))
            mine[:], others[own] = mine[order], second[order]
        else:
            mine.sort()
    starts = ends[:-1].copy()
    clean = _without_nan(values, others, starts, lengths)
    estimates = statistic_of(statistic, values, others, starts, lengths)
    return Samples(values, others, starts, lengths, estimates, clean)


def _without_nan(
    values: Values, others: Values, starts: Indices, lengths: Indices
) -> npt.NDArray[np.bool_]:
    clean = np.ones(starts.size, dtype=np.bool_)
    if starts.size:
        clean &= ~np.isnan(values[starts + lengths - 1])  # sorting puts NaN last
        if others.size:
            clean &= ~np.logical_or.reduceat(np.isnan(others), starts)
    return clean


def statistic_of(
    statistic: Statistic, values: Values, others: Values, starts: Indices, lengths: Indices
) -> Values:
    """The statistic of sorted groups, by the loop that serves its own calls."""
    count = starts.size
    out = np.full((count, 1), NULL)
    given = np.array(statistic.parameters, dtype=np.float64).reshape(-1, 1)
    parameters = np.ascontiguousarray(np.repeat(given, max(count, 1), axis=1))
    driver(statistic.function)(
        values,
        others,
        starts,
        lengths,
        np.arange(count),
        parameters if statistic.parameters else np.empty((0, 1)),
        statistic.function.smallest_n,
        out,
        np.arange(count + 1),
        0,
        np.zeros(2, dtype=np.int64),  # these values are counted as done by the resampling
    )
    return out[:, 0].copy()


def keys_of(samples: Samples, seeds: Values) -> npt.NDArray[np.uint64]:
    """The key of each group's random numbers: its own content, and a seed."""
    keys = np.empty(samples.size, dtype=np.uint64)
    for r in range(samples.size):
        own = slice(int(samples.starts[r]), int(samples.starts[r] + samples.lengths[r]))
        digest = hashlib.blake2b(samples.values[own].data, digest_size=8)
        if samples.others.size:
            digest.update(samples.others[own].data)
        keys[r] = int.from_bytes(digest.digest(), "little")
    over_arrays: Any = mixed  # the same whole numbers as in compiled loops
    return over_arrays(keys ^ over_arrays(seeds.astype(np.uint64) + GOLDEN))
