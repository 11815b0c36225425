"""The jackknife of trimmed and winsorized means, in closed form, for many groups at once."""

import numpy as np
import numpy.typing as npt

from midspread.udfs.declaring import Values
from midspread.udfs.drivers import Indices


def middles_left_out(
    values: Values, lengths: Indices, share: float, *, winsorize: bool
) -> npt.NDArray[np.float64]:
    """The figures of `leave_one_out` for each group.

    Parameters
    ----------
    values : ndarray of float64
        The groups' values, one group after the other, each sorted and finite.
    lengths : ndarray of int64
        How many values each group has, 2 or more.
    share : float
        Share cut from each tail.
    winsorize : bool
        Whether what is cut is replaced by the nearest kept value.

    Notes
    -----
    Without value i a trimmed mean is (S − x_j) / h, S being the sum from the first to the last
    value that is kept without some value, and x_j the value among these nearest to value i.
    """
    ends = np.cumsum(lengths)
    starts = ends - lengths
    group = np.repeat(np.arange(lengths.size), lengths)
    rank = np.arange(values.size) - starts[group]
    v = values - values[starts + lengths // 2][group]
    whole, kept = _cuts(lengths, share)
    cut, h = _cuts(lengths - 1, share)
    first, last = starts + cut, ends - 1 - cut
    total = _sums(v, first, last + 1)
    nearest = np.clip(rank, cut[group], (last - starts)[group]) + starts[group]
    left = total[group] - v[nearest]
    own = _sums(v, starts + whole, ends - whole)
    if winsorize:
        place = np.arange(values.size)
        low = np.where(place > first[group], v[first][group], v[first + 1][group])
        high = np.where(place < last[group], v[last][group], v[last - 1][group])
        left = (left + cut[group] * (low + high)) / (lengths - 1)[group]
        own = (own + whole * (v[starts + whole] + v[ends - 1 - whole])) / lengths
    else:
        left, own = left / h[group], own / kept

    left -= own[group]
    mean = np.add.reduceat(left, starts) / lengths
    away = mean[group] - left
    largest = np.maximum.reduceat(np.abs(away), starts)
    away /= np.where(largest > 0.0, largest, 1.0)[group]
    squares = np.add.reduceat(away * away, starts)
    cubes = np.add.reduceat(away * away * away, starts)
    none = squares == 0.0
    accelerations = np.where(none, 0.0, cubes) / (6.0 * np.where(none, 1.0, squares) ** 1.5)
    # A mean is the mean of its leave-one-out values.
    bias = np.where((whole == 0) & (cut == 0) | none, 0.0, mean)
    return np.stack((bias, squares * largest * largest, accelerations), axis=1)


def _cuts(lengths: Indices, share: float) -> tuple[Indices, Indices]:
    """Cut from each tail, and kept; a median keeps the one or two values in the middle."""
    cut = (share * lengths).astype(np.int64)
    cut = np.where((share == 0.5) | (2 * cut >= lengths), (lengths - 1) // 2, cut)
    return cut, lengths - 2 * cut


def _sums(v: Values, starts: Indices, stops: Indices) -> Values:
    """Sums of slices of v, none of them empty."""
    bounds = np.stack((starts, stops), axis=1).reshape(-1)
    return np.add.reduceat(np.append(v, 0.0), bounds)[::2]
