"""The jackknife of means and deviations of trimmed or winsorized values, in closed form."""

import numpy as np
import numpy.typing as npt

from midspread.udfs.declaring import NULL, Values
from midspread.udfs.drivers import Indices
from midspread.udfs.resampling.middles import DEVIATION, ERROR, WINSORIZED_MEAN


def middles_left_out(
    values: Values, lengths: Indices, share: float, figure: int
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
    figure : int
        What is computed of the values, as for `middles.of_middles`.

    Notes
    -----
    Without value i a trimmed mean is (S − x_j) / h, S being the sum from the first to the last
    value that is kept without some value, and x_j the value among these nearest to value i. Sums of
    squares go likewise.
    """
    ends = np.cumsum(lengths)
    starts = ends - lengths
    group = np.repeat(np.arange(lengths.size), lengths)
    rank = np.arange(values.size) - starts[group]
    v = values - values[starts + lengths // 2][group]
    whole, kept = _cuts(lengths, share)
    cut, h = _cuts(lengths - 1, share)
    first, last = starts + cut, ends - 1 - cut
    nearest = np.clip(rank, cut[group], (last - starts)[group]) + starts[group]
    place = np.arange(values.size)

    def sums(w: Values, tails: bool) -> tuple[Values, Values]:
        """Of w without each value, and of all of it: what is kept, with what replaces the rest."""
        left = _sums(w, first, last + 1)[group] - w[nearest]
        own = _sums(w, starts + whole, ends - whole)
        if tails:
            low = np.where(place > first[group], w[first][group], w[first + 1][group])
            high = np.where(place < last[group], w[last][group], w[last - 1][group])
            left += cut[group] * (low + high)
            own += whole * (w[starts + whole] + w[ends - 1 - whole])
        return left, own

    left, own = sums(v, figure >= WINSORIZED_MEAN)
    if figure >= DEVIATION:
        squares, own_squares = sums(v * v, True)
        squares -= left * left / (lengths - 1)[group]
        own_squares -= own * own / lengths
        free, own_free = lengths - 2, lengths - 1
        if figure == ERROR:
            free, own_free = h * (h - 1), kept * (kept - 1)
        with np.errstate(invalid="ignore", divide="ignore"):
            left = np.sqrt(np.maximum(squares, 0.0) / free[group])
            own = np.sqrt(np.maximum(own_squares, 0.0) / own_free)
    elif figure == WINSORIZED_MEAN:
        left, own = left / (lengths - 1)[group], own / lengths
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
    is_mean = (whole == 0) & (cut == 0) & (figure <= WINSORIZED_MEAN)
    bias = np.where(is_mean | none, 0.0, mean)
    figures = np.stack((bias, squares * largest * largest, accelerations), axis=1)
    if figure == ERROR:
        figures[h < 2] = NULL
    return figures


def _cuts(lengths: Indices, share: float) -> tuple[Indices, Indices]:
    """Cut from each tail, and kept; a median keeps the one or two values in the middle."""
    cut = (share * lengths).astype(np.int64)
    cut = np.where((share == 0.5) | (2 * cut >= lengths), (lengths - 1) // 2, cut)
    return cut, lengths - 2 * cut


def _sums(v: Values, starts: Indices, stops: Indices) -> Values:
    """Sums of slices of v, none of them empty."""
    bounds = np.stack((starts, stops), axis=1).reshape(-1)
    return np.add.reduceat(np.append(v, 0.0), bounds)[::2]
