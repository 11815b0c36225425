"""The ladder of powers and its relatives, as functions of single rows."""

from typing import Final

import numpy as np

from midspread.udfs.declaring import NULL, Parameter, Values, row_function

POWER: Final = Parameter("power", "power of the re-expression; 0 stands for the logarithm")
_START: Final = Parameter("start", "what is added before the logarithm is taken")


def _refusing(function: str, parameter: Parameter, body: str) -> str:
    """A body that says what is wrong where the parameter is not a finite number."""
    name = parameter.name
    start = f"{function}: {name} must be {parameter.allowed}, got "
    end = f"; write for example {name} := {parameter.example()}."
    return (
        f"CASE WHEN {name} IS NULL OR NOT isfinite({name}) "
        f"THEN error('{start}' || coalesce(CAST({name} AS VARCHAR), 'NULL') || '{end}') "
        f"ELSE {body} END"
    )


@row_function(
    family="re-expression",
    columns=("x",),
    parameters=(POWER,),
    formula="x^power for power > 0, ln x for power = 0, −x^power for power < 0",
    source="Tukey 1977, Exploratory Data Analysis, Addison-Wesley, chapter 3",
    example="rung(dwell_s, -0.5)",
    body=_refusing(
        "rung",
        POWER,
        "CASE WHEN power = 1 THEN x + 0.0 WHEN x < 0 OR (x = 0 AND power <= 0) THEN NULL "
        "WHEN power = 0 THEN ln(x) WHEN power > 0 THEN pow(x, power) "
        "ELSE 0.0 - pow(x, power) END",
    ),
)
def rung(x: Values, power: Values) -> Values:
    """A value on one rung of the ladder of powers; every rung keeps the order of the values.

    Parameters
    ----------
    x : number
        A measurement, 0 or more.
    power : float
        2, 1, 0.5, 0, −0.5, −1 are the usual rungs; 0 is the logarithm.

    Returns
    -------
    float
        In the re-expressed unit. NULL for x below 0 unless power is 1, and for x = 0 when power
        is 0 or less.

    Notes
    -----
    Powers below 0 carry a minus sign, so that larger stays larger. A result too large for a
    double is ±Inf, one too small is 0; +Inf stays +Inf for powers from 0 up and becomes 0 for
    those below.

    References
    ----------
    Tukey, J. W. (1977). Exploratory Data Analysis. Addison-Wesley, chapter 3.
    """
    raise NotImplementedError("computed by its SQL body")


@row_function(
    family="re-expression",
    columns=("x",),
    parameters=(_START,),
    formula="ln(x + start)",
    source="Tukey 1977, Exploratory Data Analysis, Addison-Wesley",
    example="started_log(dwell_s, 0.5)",
    body=_refusing("started_log", _START, "CASE WHEN x + start > 0 THEN ln(x + start) END"),
)
def started_log(x: Values, start: Values) -> Values:
    """Logarithm after a small start is added, for counts and amounts that may be 0.

    Parameters
    ----------
    x : number
        A count or amount.
    start : float
        In the unit of x; often 1/6, 1/4 or 1/2 for counts.

    Returns
    -------
    float
        NULL where x + start is 0 or less. A sum too large for a double gives Inf.

    Notes
    -----
    Correct to a few units in the sixteenth decimal place, also near x + start = 1. The start is a
    choice: see how far the answer moves with another one.

    References
    ----------
    Tukey, J. W. (1977). Exploratory Data Analysis. Addison-Wesley.
    """
    raise NotImplementedError("computed by its SQL body")


@row_function(
    family="re-expression",
    columns=("f",),
    parameters=(POWER,),
    formula="(f^power − (1−f)^power) / power; ln(f / (1−f)) for power = 0",
    source="Tukey 1977, Exploratory Data Analysis, Addison-Wesley, chapter 15",
    example="folded_power(boardings / 60.0, 0.5)",
)
def folded_power(f: Values, power: Values) -> Values:
    """A counted fraction, stretched alike at both ends; power 0 gives the log-odds.

    Parameters
    ----------
    f : number
        A fraction from 0 to 1.
    power : float
        1 leaves the fraction (as 2f − 1), 0.5 is the folded root, 0 the log-odds.

    Returns
    -------
    float
        Without unit; 0 at f = 1/2, and with the opposite sign for 1 − f. NULL for f outside
        0 … 1, and for 0 and 1 when power is 0 or less.

    Notes
    -----
    A result too large for a double (a fraction near an end under a power far below 0) is ±Inf.
    Divided by power, so that order is kept on every rung and the rungs run into the log-odds.

    References
    ----------
    Tukey, J. W. (1977). Exploratory Data Analysis. Addison-Wesley, chapter 15.
    """
    # From the half above 1/2, whose mirror image the lower half is; 2f − 1 is exact near 1/2.
    with np.errstate(all="ignore"):
        f = f + 0.0
        upper = np.maximum(f, 1.0 - f)
        rest = np.where(f < 0.5, f, 1.0 - f)
        log_odds = np.log1p(np.abs(2.0 * f - 1.0) / rest)
        folded = np.exp(power * np.log(upper)) * (-np.expm1(-power * log_odds)) / power
        folded = np.where(power == 0.0, log_odds, folded)
    lost = (f < 0.0) | (f > 1.0) | ((power <= 0.0) & ((f == 0.0) | (f == 1.0)))
    return np.where(lost, NULL, np.where(f < 0.5, -folded, folded) + 0.0)


@row_function(
    family="re-expression",
    columns=("rank", "n"),
    formula="Φ⁻¹((rank − 3/8) / (n + 1/4))",
    source="Blom 1958, Statistical Estimates and Transformed Beta-Variables, Wiley",
    example="normal_score(boardings, 60)",
)
def normal_score(rank: Values, n: Values) -> Values:
    """Where the value of this rank would stand if the n values were standard normal.

    Parameters
    ----------
    rank : number
        1 for the smallest; tied values may share their mean rank.
    n : number
        How many values there are.

    Returns
    -------
    float
        In standard deviations; 0 for the middle rank. NULL unless 1 ≤ rank ≤ n.

    Notes
    -----
    Normal scores keep the order of the values and drop their distances. DuckDB does not
    know the type of rank() OVER (…) in time: take the ranks in a subquery and score them outside.

    References
    ----------
    Blom, G. (1958). Statistical Estimates and Transformed Beta-Variables. Wiley.
    """
    from scipy.special import ndtri

    with np.errstate(all="ignore"):
        other = n + 1.0 - rank
        score = ndtri((np.minimum(rank, other) - 0.375) / (n + 0.25))
        known = (rank >= 1.0) & (rank <= n) & np.isfinite(n)
        missing = np.isnan(rank) | np.isnan(n)
    scored = np.where(rank > other, -score, score) + 0.0
    return np.where(missing, np.nan, np.where(known, scored, NULL))
