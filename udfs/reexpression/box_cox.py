"""Power families that run smoothly through the logarithm, and their way back."""

import numpy as np

from midspread.udfs.declaring import NULL, Values, row_function
from midspread.udfs.reexpression.rungs import POWER


def _stretched(log: Values, power: Values) -> Values:
    """(e^(power · log) − 1) / power, with all digits however small the power is."""
    exponent = power * log
    by_ratio = log * np.where(exponent == 0.0, 1.0, np.expm1(exponent) / exponent)
    return np.where(np.isfinite(log), by_ratio, np.expm1(exponent) / power)


def _relaxed(v: Values, power: Values) -> Values:
    """What `_stretched` made of it: ln(1 + power · v) / power."""
    grown = power * v
    by_ratio = v * np.where(grown == 0.0, 1.0, np.log1p(grown) / grown)
    return np.where(np.isfinite(grown), by_ratio, np.log1p(grown) / power)


@row_function(
    family="re-expression",
    columns=("x",),
    parameters=(POWER,),
    formula="(x^power − 1) / power; ln x for power = 0",
    source="Box & Cox 1964, J. R. Statist. Soc. B 26, 211–252",
    example="box_cox(dwell_s, -0.4)",
)
def box_cox(x: Values, power: Values) -> Values:
    """A power that runs smoothly through the logarithm; order kept.

    Parameters
    ----------
    x : number
        A measurement above 0; 0 too where power is above 0.
    power : float
        1 leaves the values but for a shift by 1; 0 is the logarithm.

    Returns
    -------
    float
        In the re-expressed unit. NULL for x below 0, and for x = 0 when power is 0 or less.

    Notes
    -----
    Accurate near power 0 and near x = 1. A result too large for a double is ±Inf.

    References
    ----------
    Box, G. E. P. & Cox, D. R. (1964). J. R. Statist. Soc. B 26, 211–252.
    """
    with np.errstate(all="ignore"):
        log = np.log(x)
        value = np.where(power == 0.0, log, _stretched(log, power))
    return np.where((x < 0.0) | ((x == 0.0) & (power <= 0.0)), NULL, value + 0.0)


@row_function(
    family="re-expression",
    columns=("v",),
    parameters=(POWER,),
    formula="(1 + power · v)^(1 / power); e^v for power = 0",
    source="Box & Cox 1964, J. R. Statist. Soc. B 26, 211–252",
    example="box_cox_back(1.2, -0.4)",
)
def box_cox_back(v: Values, power: Values) -> Values:
    """Back from `box_cox` to the unit of the measurement.

    Parameters
    ----------
    v : number
        A value on the scale of ``box_cox(x, power)``.
    power : float
        The power it was made with.

    Returns
    -------
    float
        In the unit of the measurement. NULL where 1 + power · v is below 0: no measurement leads
        there.

    Notes
    -----
    The mean of re-expressed values taken back is not the mean of the values; their median is
    their median. Too large for a double is Inf. Digits that the way there has rounded away, where
    x^power is far below 1, do not come back.

    References
    ----------
    Box, G. E. P. & Cox, D. R. (1964). J. R. Statist. Soc. B 26, 211–252.
    """
    with np.errstate(all="ignore"):
        log = np.where(power == 0.0, v, _relaxed(v, power))
        return np.where(power * v < -1.0, NULL, np.exp(log))


@row_function(
    family="re-expression",
    columns=("x",),
    parameters=(POWER,),
    formula=(
        "x ≥ 0: ((x+1)^power − 1) / power, ln(x+1) for power = 0; "
        "x < 0: −((1−x)^(2−power) − 1) / (2−power), −ln(1−x) for power = 2"
    ),
    source="Yeo & Johnson 2000, Biometrika 87, 954–959",
    example="yeo_johnson(dwell_s - 20, 0.5)",
)
def yeo_johnson(x: Values, power: Values) -> Values:
    """A power for values of either sign; order kept.

    Parameters
    ----------
    x : number
        Any measurement; 0 stays 0.
    power : float
        1 leaves the values as they are; below 1 pulls in a long upper tail.

    Returns
    -------
    float
        In the re-expressed unit.

    Notes
    -----
    It bends around x = 0 on the scale of 1 unit, so the answer depends on the unit of x. A result
    too large for a double is ±Inf.

    References
    ----------
    Yeo, I.-K. & Johnson, R. A. (2000). Biometrika 87, 954–959.
    """
    with np.errstate(all="ignore"):
        used = np.where(x < 0.0, 2.0 - power, power)
        log = np.log1p(np.abs(x))
        value = np.where(used == 0.0, log, _stretched(log, used))
    return np.where(x < 0.0, -value, value) + 0.0


@row_function(
    family="re-expression",
    columns=("v",),
    parameters=(POWER,),
    formula=(
        "v ≥ 0: (1 + power · v)^(1/power) − 1, e^v − 1 for power = 0; "
        "v < 0: 1 − (1 − (2−power) · v)^(1/(2−power)), 1 − e^(−v) for power = 2"
    ),
    source="Yeo & Johnson 2000, Biometrika 87, 954–959",
    example="yeo_johnson_back(1.2, 0.5)",
)
def yeo_johnson_back(v: Values, power: Values) -> Values:
    """Back from `yeo_johnson` to the unit of the measurement.

    Parameters
    ----------
    v : number
        A value on the scale of ``yeo_johnson(x, power)``.
    power : float
        The power it was made with.

    Returns
    -------
    float
        In the unit of the measurement. NULL where no measurement leads: v above −1/power for
        powers below 0, v below 1/(2 − power) for powers above 2.

    Notes
    -----
    The mean of re-expressed values taken back is not the mean of the values; their median is
    their median. Too large for a double is ±Inf.

    References
    ----------
    Yeo, I.-K. & Johnson, R. A. (2000). Biometrika 87, 954–959.
    """
    with np.errstate(all="ignore"):
        used = np.where(v < 0.0, 2.0 - power, power)
        size = np.abs(v)
        log = np.where(used == 0.0, size, _relaxed(size, used))
        value = np.expm1(log)
        signed = np.where(v < 0.0, -value, value) + 0.0
        return np.where(used * size < -1.0, NULL, signed)
