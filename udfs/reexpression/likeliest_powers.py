"""The power under which the values look most normal, with its limits."""

import math
from typing import Final

import numpy as np

from midspread.udfs.arithmetic.order_statistics import median_sorted
from midspread.udfs.arithmetic.sums import compensated_mean
from midspread.udfs.declaring import Values, aggregate, compiled
from midspread.udfs.reexpression.profile_likelihood import Indices, fit_power

_FIELDS: Final = ("power", "lower", "upper", "log_likelihood")
_BREAKDOWN: Final = "0: one wild value can move it by a whole rung"
_COST: Final = "O(n log n) time, then some thirty passes; O(n) memory"


@aggregate(
    family="re-expression",
    fields=_FIELDS,
    formula=(
        "maximum of l(λ) = (λ − 1) Σ ln x − n/2 · ln var(box_cox(x, λ)), var with divisor n; "
        "limits where l falls 3.841459/2 below it"
    ),
    source="Box & Cox 1964, J. R. Statist. Soc. B 26, 211–252",
    breakdown=_BREAKDOWN,
    cost=_COST,
    smallest_n=2,
    example="box_cox_power(dwell_s + 0.5)",
    linear=False,
    watches=True,
)
def box_cox_power(x: Values, out: Values, control: Indices) -> None:
    """The power of Box & Cox under which the values look most normal, with 95 % limits.

    Parameters
    ----------
    x : array of float
        Sorted values of one group, all above 0.

    Returns
    -------
    power, lower, upper : float
        The power, and the limits of the profile likelihood at 95 %.
    log_likelihood : float
        Its maximum, without the constant −n/2 · (1 + ln 2π).

    Notes
    -----
    NULL where a value is 0 or less or all values are equal, NaN where one is infinite. l(λ) is
    concave, so there is no range to search: steps that double enclose the maximum and each limit,
    which are then found to 12 digits, of themselves or of 1 / sd(ln x). The unit of x does not
    matter to the power. A normal look is not a promise: a few wild values drag the likelihood a
    whole rung, where `power_ladder` and its medcouple stay. The limits assume independent values
    and, after other choices made on the same data, are too narrow.

    References
    ----------
    Box, G. E. P. & Cox, D. R. (1964). J. R. Statist. Soc. B 26, 211–252.
    """
    n = x.size
    if x[0] <= 0.0 or x[0] == x[n - 1]:
        return
    if math.isinf(x[n - 1]):
        out[:4] = math.nan
        return
    _fit_one_sided(x, 0.0, out, control)


@aggregate(
    family="re-expression",
    fields=_FIELDS,
    formula=(
        "maximum of l(λ) = (λ − 1) Σ sign(x) ln(1 + abs(x)) − n/2 · ln var(yeo_johnson(x, λ)), "
        "var with divisor n; limits where l falls 3.841459/2 below it"
    ),
    source="Yeo & Johnson 2000, Biometrika 87, 954–959",
    breakdown=_BREAKDOWN,
    cost=_COST,
    smallest_n=2,
    example="yeo_johnson_power(dwell_s - 20)",
    linear=False,
    watches=True,
)
def yeo_johnson_power(x: Values, out: Values, control: Indices) -> None:
    """The power of Yeo & Johnson under which the values look most normal, with 95 % limits.

    Parameters
    ----------
    x : array of float
        Sorted values of one group, of either sign.

    Returns
    -------
    power, lower, upper : float
        The power, and the limits of the profile likelihood at 95 %.
    log_likelihood : float
        Its maximum, without the constant −n/2 · (1 + ln 2π).

    Notes
    -----
    NULL where all values are equal, NaN where one is infinite. l(λ) is concave and searched as in
    `box_cox_power`. The unit of x and its zero matter, as the re-expression bends around 0 on the
    scale of 1 unit. The limits assume independent values.

    References
    ----------
    Yeo, I.-K. & Johnson, R. A. (2000). Biometrika 87, 954–959.
    """
    n = x.size
    if x[0] == x[n - 1]:
        return
    if math.isinf(x[0]) or math.isinf(x[n - 1]):
        out[:4] = math.nan
        return
    if x[0] >= 0.0:
        _fit_one_sided(x, 1.0, out, control)
    elif x[n - 1] <= 0.0:
        # Below 0 it is Box and Cox's family of 1 − x under the power 2 − λ.
        _fit_one_sided(-x[::-1], 1.0, out, control)
        upper = 2.0 - out[1]
        out[0] = 2.0 - out[0]
        out[1] = 2.0 - out[2]
        out[2] = upper
    else:
        logs = np.empty(n)
        for i in range(n):
            logs[i] = math.log1p(x[i]) if x[i] >= 0.0 else -math.log1p(-x[i])
        fit_power(logs, True, out, control)
        out[3] -= compensated_mean(logs, 0, n) * n


@compiled
def _fit_one_sided(x: Values, start: float, out: Values, control: Indices) -> None:
    """Fit the power of x + start, all above 0; start is 0 or 1."""
    n = x.size
    middle = median_sorted(x)
    base = middle + start
    logs = np.empty(n)
    for i in range(n):
        part = (x[i] - middle) / base
        if -0.5 < part < 1.0:
            logs[i] = math.log1p(part)  # all digits, however near to the middle
        else:
            logs[i] = _log_of_sum(x[i], start) - _log_of_sum(middle, start)
    mean = compensated_mean(logs, 0, n)
    for i in range(n):
        logs[i] -= mean
    fit_power(logs, False, out, control)
    out[3] -= n * (mean + _log_of_sum(middle, start))


@compiled
def _log_of_sum(x: float, start: float) -> float:
    return math.log(x) if start == 0.0 else math.log1p(x)
