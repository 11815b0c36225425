"""From the drawn values of a statistic to an interval, for many groups at once.

A quantile of R draws is the order statistic number (R + 1) · p; between two of them it is
interpolated on the normal scale, beyond the first and the last draw it is that draw (Davison &
Hinkley 1997, equation 5.6).
"""

from dataclasses import dataclass
from typing import Final

import numpy as np
import numpy.typing as npt

from midspread.udfs.declaring import NULL, Values, null_mask

METHODS: Final = ("percentile", "basic", "normal", "bca", "studentized")

_WHOLE: Final = 1e-9
"""Room for rounding in (R + 1) · p."""


@dataclass(frozen=True)
class Intervals:
    """One figure a group.

    Attributes
    ----------
    lower, upper : ndarray of float64
        The limits; `NULL` where the draws give none.
    se : ndarray of float64
        Standard deviation of the draws, R − 1 in the denominator.
    bias : ndarray of float64
        Mean of the draws minus the estimate.
    resamples : ndarray of float64
        Number of draws that have a value.
    """

    lower: Values
    upper: Values
    se: Values
    bias: Values
    resamples: Values


def intervals(
    method: str,
    estimates: Values,
    draws: Values,
    confidence: Values,
    *,
    accelerations: Values | None = None,
    errors: Values | None = None,
    draw_errors: Values | None = None,
) -> Intervals:
    """The interval of each group from its draws.

    Parameters
    ----------
    method : str
        One of `METHODS`.
    estimates : ndarray of float64, shape (groups,)
        The statistic of the values themselves.
    draws : ndarray of float64, shape (groups, resamples)
        The statistic of each resample, in any order; `NULL` where it has no value: such draws are
        left out. **Sorted in place.** A draw that is NaN makes all figures NaN.
    confidence : ndarray of float64, shape (groups,)
        Above 0 and below 1.
    accelerations : ndarray of float64, shape (groups,)
        Needed for bca; see `acceleration`.
    errors, draw_errors : ndarray of float64, shapes (groups,) and (groups, resamples)
        Needed for studentized: the standard errors that belong to estimates and draws.
        draw_errors is changed in place.

    Returns
    -------
    Intervals
        All draws equal to the estimate give an interval of no width.

    Notes
    -----
    bca: z0 counts the draws below the estimate and half of those equal to it, the share being kept
    within 1/(2R) of 0 and 1, so that it stays finite.

    studentized: draws with a standard error of 0 are left out of the pivots; the limits are `NULL`
    when that leaves less than half of them, and the estimate itself where its own is 0.
    """
    missing = np.isnan(draws)
    odd = missing.any(axis=1)
    if not odd.any():
        return _of_whole_rows(
            method, estimates, draws, confidence, accelerations, errors, draw_errors
        )
    found = Intervals(*(np.full(estimates.size, NULL) for _ in range(5)))
    found.resamples[:] = draws.shape[1] - null_mask(draws).reshape(draws.shape).sum(axis=1)
    rows = [np.flatnonzero(~odd)] if not odd.all() else []
    for row in np.flatnonzero(odd):
        if (missing[row] & ~null_mask(draws[row])).any():
            for figures in (found.lower, found.upper, found.se, found.bias):
                figures[row] = np.nan
        elif not missing[row].all():
            rows.append(np.array([row]))
    for chosen in rows:
        kept = ~missing[chosen[0]]
        part = _of_whole_rows(
            method,
            estimates[chosen],
            np.ascontiguousarray(draws[chosen][:, kept]),
            confidence[chosen],
            None if accelerations is None else accelerations[chosen],
            None if errors is None else errors[chosen],
            None if draw_errors is None else np.ascontiguousarray(draw_errors[chosen][:, kept]),
        )
        for name, values in vars(part).items():
            getattr(found, name)[chosen] = values
    return found


def _of_whole_rows(
    method: str,
    estimates: Values,
    draws: Values,
    confidence: Values,
    accelerations: Values | None,
    errors: Values | None,
    draw_errors: Values | None,
) -> Intervals:
    """As `intervals`, where every draw has a value."""
    with np.errstate(invalid="ignore", over="ignore", divide="ignore"):
        # Figures come from distances to the estimate: a common shift costs no digits.
        away = draws - estimates[:, np.newaxis]
        away[draws == estimates[:, np.newaxis]] = 0.0
        bias, se = _bias_and_error(away)
        tail = (1.0 - confidence) / 2.0
        if method == "studentized":
            assert errors is not None and draw_errors is not None
            lower, upper = _studentized(estimates, away, tail, errors, draw_errors)
        elif method == "normal":
            reach = _normal_quantile(1.0 - tail) * se
            centre = estimates - bias
            lower, upper = centre - reach, centre + reach
        else:
            draws.sort(axis=1)
            low, high = tail, 1.0 - tail
            if method == "bca":
                assert accelerations is not None
                low, high = _corrected(estimates, draws, tail, accelerations)
            lower, upper = quantiles(draws, low), quantiles(draws, high)
            if method == "basic":
                lower, upper = _mirrored(estimates, upper), _mirrored(estimates, lower)
    count = np.full(estimates.size, float(draws.shape[1]))
    return Intervals(lower, upper, se, bias, count)


def _bias_and_error(away: Values) -> tuple[Values, Values]:
    """Mean and standard deviation of each row."""
    count = away.shape[1]
    bias = away.mean(axis=1)
    if count < 2:
        return bias, np.full(bias.size, NULL)
    rest = away - bias[:, np.newaxis]
    # Squares leave the range of a double long before the values do.
    unit = np.abs(rest).max(axis=1)
    unit[(unit == 0.0) | ~np.isfinite(unit)] = 1.0
    scaled = rest / unit[:, np.newaxis]
    se = np.sqrt((scaled * scaled).sum(axis=1) / (count - 1)) * unit
    equal = (away == away[:, :1]).all(axis=1)
    return np.where(equal, away[:, 0], bias), np.where(equal, 0.0, se)


def quantiles(ordered: Values, probs: Values) -> Values:
    """One quantile of each row of sorted draws, by the rule of this module."""
    count = ordered.shape[1]
    rows = np.arange(ordered.shape[0])
    position = (count + 1) * probs
    nearest = np.rint(position)
    whole = np.abs(position - nearest) < _WHOLE
    below = np.where(whole, nearest, np.floor(position))
    inside = (below >= 1) & (below < count) & ~whole
    place = np.clip(below, 1, count).astype(np.int64)
    low = ordered[rows, place - 1]
    high = ordered[rows, np.minimum(place, count - 1)]
    start = _normal_quantile(place / (count + 1))
    end = _normal_quantile(np.minimum(place + 1, count) / (count + 1))
    at = _normal_quantile(np.where(inside, probs, 0.5))
    part = np.where(inside, (at - start) / np.where(end > start, end - start, 1.0), 0.0)
    between = low + part * (high - low)
    return np.where((part == 0.0) | (low == high), low, np.clip(between, low, high))


def _mirrored(estimates: Values, limits: Values) -> Values:
    """2 · estimate − limit."""
    return np.where(limits == estimates, estimates, estimates - (limits - estimates))


def _corrected(
    estimates: Values, ordered: Values, tail: Values, accelerations: Values
) -> tuple[Values, Values]:
    """Which quantiles of the draws bca takes (Efron 1987)."""
    count = ordered.shape[1]
    centre = estimates[:, np.newaxis]
    share = ((ordered < centre).sum(axis=1) + 0.5 * (ordered == centre).sum(axis=1)) / count
    offset = _normal_quantile(np.clip(share, 0.5 / count, 1.0 - 0.5 / count))
    probs = []
    for end in (_normal_quantile(tail), _normal_quantile(1.0 - tail)):
        sum_ = offset + end
        room = 1.0 - accelerations * sum_
        # Where the correction runs past all bounds it ends at the outermost draw.
        shifted = np.where(room > 0.0, offset + sum_ / room, np.copysign(np.inf, sum_))
        probs.append(_normal_mass(shifted))
    return probs[0], probs[1]


def _studentized(
    estimates: Values, away: Values, tail: Values, errors: Values, draw_errors: Values
) -> tuple[Values, Values]:
    """Limits from the pivots (draw − estimate) / standard error of the draw."""
    lower = np.full(estimates.size, NULL)
    upper = lower.copy()
    zero = ~(draw_errors > 0.0)
    pivots = away / draw_errors
    pivots[zero] = np.inf  # sorted behind those that count
    pivots.sort(axis=1)
    count = away.shape[1]
    kept = count - zero.sum(axis=1)
    for number in np.unique(kept):
        rows = np.flatnonzero(kept == number)
        if 2 * number < count:
            continue
        counted = pivots[rows, :number]
        at = estimates[rows]
        lower[rows] = at - quantiles(counted, 1.0 - tail[rows]) * errors[rows]
        upper[rows] = at - quantiles(counted, tail[rows]) * errors[rows]
    still = errors == 0.0
    return np.where(still, estimates, lower), np.where(still, estimates, upper)


def acceleration(left_out: npt.ArrayLike) -> float:
    """The acceleration of bca from the estimates with one observation or unit left out each.

    Σ d³ / (6 (Σ d²)^(3/2)) with d = mean − value (Efron 1987); 0 where all are equal, NaN where
    one is not finite.
    """
    values = np.asarray(left_out, dtype=np.float64)
    if values.size == 0 or (values == values[0]).all():
        return 0.0
    with np.errstate(invalid="ignore", over="ignore"):
        away = values - values[values.size // 2]
        away = away.mean() - away
        largest = np.abs(away).max()
        if largest == 0.0:
            return 0.0
        away /= largest
        squares = float((away * away).sum())
        return float((away * away * away).sum()) / (6.0 * squares * np.sqrt(squares))


def _normal_quantile(probs: Values) -> Values:
    from scipy.special import ndtri

    return ndtri(probs)


def _normal_mass(points: Values) -> Values:
    from scipy.special import ndtr

    return ndtr(points)
