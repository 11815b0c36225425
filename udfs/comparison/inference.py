"""Intervals, p-values and effects from the figures of two samples, many pairs at once."""

import numpy as np
import numpy.typing as npt

from midspread.udfs.declaring import NULL, Values
from midspread.udfs.drivers import Indices

Flags = npt.NDArray[np.bool_]


def kept(n: Indices, share: float | Values) -> Indices:
    """h = n − 2⌊share · n⌋, the number of values that trimming leaves."""
    return n - 2 * np.floor(share * n).astype(np.int64)


def yuen(
    difference: Values, roots: Values, n: Indices, share: float, confidence: float
) -> tuple[Values, Values, Values]:
    """Lower and upper limit and two-sided p of a difference of two trimmed means.

    Parameters
    ----------
    difference : ndarray, shape (pairs,)
        Of the trimmed means.
    roots : ndarray, shape (pairs, 2)
        √ of the winsorized sums of squared deviations.
    n : ndarray, shape (pairs, 2)
        Numbers of values.

    Returns
    -------
    lower, upper, p : ndarray
        NULL where fewer than two values are kept on a side or no spread is left on either.

    References
    ----------
    Yuen, K. K. (1974). Biometrika 61, 165–170.
    """
    from scipy.special import stdtr, stdtrit

    h = kept(n, share)
    known = (h >= 2).all(axis=1) & ~((roots == 0.0).all(axis=1))
    h = np.maximum(h, 2)
    with np.errstate(all="ignore"):
        errors = roots / np.sqrt(h * (h - 1.0))
        error = np.hypot(errors[:, 0], errors[:, 1])
        # Relative to the larger one, so that no square leaves the range of a double.
        parts = errors / error[:, np.newaxis]
        df = 1.0 / (parts**4 / (h - 1.0)).sum(axis=1)
        reach = stdtrit(df, (1.0 + confidence) / 2.0) * error
        p = 2.0 * stdtr(df, -np.abs(difference / error))
        lower, upper = difference - reach, difference + reach
    return _where(known, lower), _where(known, upper), _where(known, p)


def standardised(difference: Values, roots: Values, n: Indices, share: float) -> Values:
    """The robust analogue of Cohen's d: in pooled winsorized deviations, as d on normal data.

    References
    ----------
    Algina, J., Keselman, H. J. & Penfield, R. D. (2005). Psychological Methods 10, 317–328.
    """
    total = n.sum(axis=1) - 2.0
    with np.errstate(all="ignore"):
        pooled = np.hypot(roots[:, 0], roots[:, 1]) / np.sqrt(total)
        effect = winsorized_normal_sd(share) * difference / pooled
    return _where((total > 0) & (pooled != 0.0), effect)


def winsorized_normal_sd(share: float) -> float:
    """Standard deviation of the winsorized standard normal; 0.642 at share 0.2."""
    from scipy.special import ndtri

    if share == 0.0:
        return 1.0
    z = float(-ndtri(share))
    density = np.exp(-z * z / 2.0) / np.sqrt(2.0 * np.pi)
    variance = (1.0 - 2.0 * share) - 2.0 * z * density + 2.0 * share * z * z
    return float(np.sqrt(variance))


def brunner_munzel(wins: Values, variances: Values, n: Indices) -> tuple[Values, Flags]:
    """Two-sided p of P(more) + ½ P(equal) = ½, and where the samples do not overlap.

    Without overlap the variances of the placements are 0; the exact permutation p of that
    outcome stands in, 2 / C(m + n, n).

    Parameters
    ----------
    wins : ndarray, shape (pairs,)
        2 · #(first > second) + #(first = second).
    variances : ndarray, shape (pairs, 2)
        Of the doubled placements.
    n : ndarray, shape (pairs, 2)
        Numbers of values.

    References
    ----------
    Brunner, E. & Munzel, U. (2000). Biometrical Journal 42, 17–25.
    """
    from scipy.special import gammaln, stdtr

    sizes = n.astype(np.float64)
    pairs = sizes[:, 0] * sizes[:, 1]
    apart = (wins == 0.0) | (wins == 2.0 * pairs)
    known = (n >= 2).all(axis=1)
    with np.errstate(all="ignore"):
        spread = sizes * variances / 4.0
        total = spread.sum(axis=1)
        df = total**2 / (spread**2 / (sizes - 1.0)).sum(axis=1)
        t = (wins / 2.0 - pairs / 2.0) / np.sqrt(total)
        p = 2.0 * stdtr(df, -np.abs(t))
        ways = gammaln(sizes.sum(axis=1) + 1.0) - gammaln(sizes + 1.0).sum(axis=1)
        exact = np.minimum(2.0 * np.exp(-ways), 1.0)
    p = np.where(apart, exact, p)
    return _where(known & (apart | (total != 0.0)), p), apart & known


def _where(known: Flags, numbers: Values) -> Values:
    return np.where(known, numbers, NULL)
