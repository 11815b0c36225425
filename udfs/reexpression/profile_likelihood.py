"""The profile likelihood of a power, its maximum and its limits.

Differences of re-expressed values are integrals of exponentials of the power, so the logarithm of
their variance is convex and the profile log-likelihood concave: one maximum, one limit on each
side, and no range to search. Everything is computed from logarithms taken about the middle, which
keeps the digits of values far from 0.
"""

import math
from typing import Final

import numpy as np
import numpy.typing as npt

from midspread.udfs.arithmetic.running import add
from midspread.udfs.arithmetic.sums import compensated_mean, squares_from
from midspread.udfs.declaring import Values, compiled

Indices = npt.NDArray[np.int64]

STOP: Final = 0
"""Cell of the control array that asks the loops to stop, as in `drivers`."""

DROP: Final = 1.920729410347062
"""Half of 3.841459, the 95 % point of chi-square with one degree of freedom."""

_LARGEST_EXPONENT: Final = 300.0
_FEW_DIGITS: Final = 0.1
_SCORE: Final = 0
_HEIGHT: Final = 1
_BLOCK: Final = 64
_OFTEN: Final = 1 << 20
_ROUNDS: Final = 200
_CLOSE: Final = 1e-12
_NARROWEST: Final = 1e-200
"""Logarithms so close together have no squares that a double could tell apart."""


@compiled
def fit_power(logs: Values, mirrored: bool, out: Values, control: Indices) -> None:
    """Write the power, its limits and the log-likelihood, but for a constant the caller adds.

    Parameters
    ----------
    logs : array of float
        Finite, ascending, not all equal. Where mirrored: sign(x) ln(1 + |x|) of Yeo and Johnson,
        else logarithms from which their mean has been taken.
    mirrored : bool
        Whether values below 0 take the power 2 − power.
    out : array
        Takes power, lower, upper, log-likelihood.
    control : array of int64
        Watched for a request to stop; what is written then means nothing.
    """
    n = logs.size
    values, slopes = np.empty(n), np.empty(n)
    total = compensated_mean(logs, 0, n) * n if mirrored else 0.0
    squares, _ = squares_from(logs, 0, n, 0.0, total / n)
    if squares < _NARROWEST:
        return
    step = 1.0 / math.sqrt(squares / n)
    power = _root(logs, mirrored, total, values, slopes, control, _SCORE, 0.0, 0.0, step)
    height = _profile(logs, mirrored, total, values, slopes, control, power)[0]
    out[0] = power
    step *= 2.0 / math.sqrt(n)
    floor = height - DROP
    out[1] = _root(logs, mirrored, total, values, slopes, control, _HEIGHT, floor, power, -step)
    out[2] = _root(logs, mirrored, total, values, slopes, control, _HEIGHT, floor, power, step)
    out[3] = height


@compiled
def _profile(
    logs: Values,
    mirrored: bool,
    total: float,
    values: Values,
    slopes: Values,
    control: Indices,
    power: float,
) -> tuple[float, float]:
    """The log-likelihood at a power and its derivative; scratch is overwritten."""
    n = logs.size
    other = 2.0 - power if mirrored else power
    side = -1.0 if mirrored else 1.0
    ends = max(
        power * max(logs[n - 1], 0.0), power * logs[0] if not mirrored else other * -min(logs[0], 0)
    )
    shrink = ends if ends > _LARGEST_EXPONENT else 0.0
    for i in range(n):
        if i % _OFTEN == 0 and control[STOP] != 0:
            return 0.0, 0.0
        log = logs[i]
        if log >= 0.0:
            values[i], slopes[i] = _stretched(log, power, shrink)
        else:
            value, slope = _stretched(side * log, other, shrink)
            values[i] = side * value
            slopes[i] = slope  # of −value by −power
    mean = compensated_mean(values, 0, n)
    squares, _ = squares_from(values, 0, n, 0.0, mean)
    middle = slopes[n // 2]
    product = lost = 0.0
    for first in range(0, n, _BLOCK):
        part = 0.0
        for i in range(first, min(first + _BLOCK, n)):
            part += (values[i] - mean) * (slopes[i] - middle)
        product, lost = add(product, lost, part)
    spread = math.log(squares / n) + 2.0 * shrink
    return power * total - 0.5 * n * spread, total - n * ((product + lost) / squares)


@compiled
def _stretched(log: float, power: float, shrink: float) -> tuple[float, float]:
    """(e^(power · log) − 1) / power and its derivative by power, both times e^−shrink."""
    t = power * log
    one = math.exp(-shrink)
    if shrink > 0.0 and abs(t) > 1.0:
        grown = math.exp(t - shrink)
        return (grown - one) / power, ((t - 1.0) * grown + one) / (power * power)
    grown = math.expm1(t)
    value = log if t == 0.0 else log * (grown / t)
    if abs(t) < _FEW_DIGITS:
        slope = 0.5 + t * (1 / 3 + t * (0.125 + t * (1 / 30 + t * (1 / 144 + t / 840))))
        slope += t**6 * (1 / 5760 + t * (1 / 45360 + t / 403200))
    else:
        slope = (t * (grown + 1.0) - grown) / (t * t)
    return value * one, log * log * slope * one


@compiled
def _height(
    logs: Values,
    mirrored: bool,
    total: float,
    values: Values,
    slopes: Values,
    control: Indices,
    kind: int,
    floor: float,
    power: float,
) -> float:
    """What must be 0: the derivative, or the log-likelihood above a floor."""
    likelihood, score = _profile(logs, mirrored, total, values, slopes, control, power)
    return score if kind == _SCORE else likelihood - floor


@compiled
def _root(
    logs: Values,
    mirrored: bool,
    total: float,
    values: Values,
    slopes: Values,
    control: Indices,
    kind: int,
    floor: float,
    start: float,
    step: float,
) -> float:
    """Where the height is 0: steps that double enclose it, Chandrupatla's method closes in.

    References
    ----------
    Chandrupatla, T. R. (1997). Advances in Engineering Software 28, 145–149.
    """
    unit = abs(step)
    a, fa = start, _height(logs, mirrored, total, values, slopes, control, kind, floor, start)
    if kind == _SCORE and fa < 0.0:
        step = -step
    b, fb = a, fa
    while fb != 0.0 and (fb > 0.0) == (fa > 0.0) and control[STOP] == 0:
        a, fa = b, fb
        b = b + step
        step *= 2.0
        fb = _height(logs, mirrored, total, values, slopes, control, kind, floor, b)
    if fb == 0.0 or control[STOP] != 0:
        return b
    t = 0.5
    for _ in range(_ROUNDS):
        if control[STOP] != 0:
            break
        x = a + t * (b - a)
        fx = _height(logs, mirrored, total, values, slopes, control, kind, floor, x)
        if (fx > 0.0) == (fa > 0.0):
            c, fc = a, fa
        else:
            c, fc = b, fb
            b, fb = a, fa
        a, fa = x, fx
        best = a if abs(fa) < abs(fb) else b
        least = _CLOSE * max(abs(best), unit) / abs(b - a)
        if least > 0.5 or fa == 0.0:
            return best
        xi = (a - b) / (c - b)
        phi = (fa - fb) / (fc - fb)
        if phi * phi < xi and (1.0 - phi) * (1.0 - phi) < 1.0 - xi:
            t = fa / (fb - fa) * fc / (fb - fc) + (c - a) / (b - a) * fa / (fc - fa) * fb / (
                fc - fb
            )
        else:
            t = 0.5
        t = min(1.0 - least, max(least, t))
    return a if abs(fa) < abs(fb) else b
