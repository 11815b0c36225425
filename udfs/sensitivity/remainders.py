"""What all that leaves values out shares: reading a statistic of what is left."""

from typing import Final

import numpy as np
import numpy.typing as npt

from midspread.udfs.declaring import NULL, Values, null_mask
from midspread.udfs.resampling.statistics import Statistic

MIDDLES: Final = ("trimmed_mean", "winsorized_mean")
"""Means of the middle part: closed forms on running sums."""


class Remainder:
    """Stands for sorted values without some of them; a kernel reads a few of it by rank.

    Parameters
    ----------
    x : ndarray
        Sorted values.
    places : ndarray of int64
        The places left out, ascending.
    """

    def __init__(self, x: Values, places: npt.NDArray[np.int64]) -> None:
        self.size = x.size - places.size
        self._x = x
        self._steps = places - np.arange(places.size)

    def __getitem__(self, rank: int) -> float:
        rank = int(rank) % self.size
        value: float = self._x[rank + int(np.searchsorted(self._steps, rank, side="right"))]
        return value


def places_of(x: Values, gone: Values) -> npt.NDArray[np.int64]:
    """Where values stand among sorted ones that hold them; of equal values the first ones."""
    within = np.arange(gone.size) - np.searchsorted(gone, gone)
    return (np.searchsorted(x, gone) + within).astype(np.int64)


def statistic_by_rank(statistic: Statistic, x: Values | Remainder) -> float:
    """A statistic that reads a few values by rank; `NULL` where there are too few."""
    assert statistic.function.kernel is not None
    if x.size < statistic.function.smallest_n:
        return NULL
    with np.errstate(all="ignore"):
        return float(statistic.function.kernel(x, *statistic.parameters))


def changes_from(estimate: float | Values, without: Values) -> Values:
    """without − estimate: 0 for equal infinities, `NULL` where either is."""
    estimates = np.broadcast_to(np.asarray(estimate, dtype=np.float64), without.shape)
    with np.errstate(invalid="ignore"):
        changes = np.where(without == estimates, 0.0, without - estimates)
    changes[null_mask(without) | null_mask(np.ascontiguousarray(estimates))] = NULL
    return changes
