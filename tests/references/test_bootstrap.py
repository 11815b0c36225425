"""Bootstrap and jackknife against R's boot, scipy, published data and exact cases.

R values: R 4.2.2 with boot 1.3-28.1, set.seed(1), boot(x, f, R = 199999) and boot.ci(), R chosen so
that its quantiles are single draws.
"""

import math
from collections.abc import Callable, Sequence

import numpy as np
import pytest
import scipy.stats

from midspread.udfs import Control
from midspread.udfs.binding.computing import Work
from midspread.udfs.grouped import Groups
from midspread.udfs.resampling.draws import group_draws
from midspread.udfs.resampling.left_out_figures import left_out_figures
from midspread.udfs.resampling.samples import samples_of
from midspread.udfs.resampling.statistics import Statistic, read_statistic
from tests.conftest import Estimate
from tests.references.published import published

# Efron & Tibshirani 1993, An Introduction to the Bootstrap, tables 2.1 and 3.1 (from memory).
MOUSE_TREATMENT = (94.0, 197.0, 16.0, 38.0, 99.0, 141.0, 23.0)
LSAT = (576, 635, 558, 578, 666, 580, 555, 661, 651, 605, 653, 575, 545, 572, 594)
GPA = (3.39, 3.30, 2.81, 3.03, 3.44, 3.07, 3.00, 3.43, 3.36, 3.13, 3.12, 2.74, 2.76, 2.88, 2.96)

# aircondit$hours: lower and upper limits at 95 %, and how far two such runs may lie apart.
R_LIMITS = {
    ("mean", "normal"): (34.3978, 181.8708, 0.6),
    ("mean", "basic"): (25.4167, 169.5, 1.2),
    ("mean", "percentile"): (46.6667, 190.75, 1.2),
    ("mean", "bca"): (57.0, 225.5833, 2.5),
    ("mean", "studentized"): (47.1753, 292.6064, 4.0),
    ("trimmed_mean(0.2)", "normal"): (-0.5413, 125.4950, 0.6),
    ("trimmed_mean(0.2)", "basic"): (-18.875, 110.375, 1.0),
    ("trimmed_mean(0.2)", "percentile"): (32.625, 161.875, 1.0),
    ("trimmed_mean(0.2)", "bca"): (25.625, 138.625, 1.2),
    ("median", "normal"): (42.5820, 156.5313, 0.6),
    ("median", "basic"): (61.0, 163.5, 0.0),
    ("median", "percentile"): (12.5, 115.0, 0.0),
}
R_ERRORS = {"mean": 37.62136, "trimmed_mean(0.2)": 32.15271, "median": 29.06923}


def alone(values: Sequence[float], text: str) -> tuple[Groups, Statistic]:
    x = np.array(values, dtype=np.float64)
    return Groups(x, np.array([0, x.size])), read_statistic("test", text)


def acceleration_of(values: Sequence[float], text: str, exact: int = 400) -> float:
    groups, statistic = alone(values, text)
    samples = samples_of(groups, np.array([0]), statistic)
    return float(left_out_figures(statistic, samples, exact, 1, 1, Work(Control(), 1))[0, 2])


@pytest.mark.parametrize(("statistic", "method"), R_LIMITS)
def test_limits_as_boot(estimate: Estimate, statistic: str, method: str) -> None:
    found = estimate(
        "bootstrap_interval",
        published("aircondit"),
        statistic=statistic,
        method=method,
        resamples=199_999,
    )
    lower, upper, apart = R_LIMITS[statistic, method]
    assert (found["lower"], found["upper"]) == pytest.approx((lower, upper), abs=apart + 1e-9)
    assert found["se"] == pytest.approx(R_ERRORS[statistic], rel=0.008)
    assert (found["n"], found["resamples"]) == (12, 199_999)


def test_acceleration_as_boot() -> None:
    """R: L <- empinf(data = x, statistic = f, stype = "i", type = "jack"), Σ L³/(6 (Σ L²)^1.5).

    Only the mean: empinf takes distances from the estimate, which for others is not the mean of
    the leave-one-out values.
    """
    found = acceleration_of(published("aircondit"), "mean")
    assert found == pytest.approx(0.093798073883867655, rel=1e-13)


def test_law_school(estimate: Estimate) -> None:
    """Rank correlation of Efron & Tibshirani's law schools; R: boot with R = 39999, jackknife."""
    for method, lower, upper, apart in (
        ("normal", 0.56269, 1.08752, 0.02),
        ("percentile", 0.44928, 0.96337, 0.02),
        ("basic", 0.62949, 1.14358, 0.02),
        ("bca", 0.44862, 0.96330, 0.02),
    ):
        found = estimate("bootstrap_interval_yx", GPA, LSAT, method=method, resamples=39_999)
        assert found["estimate"] == pytest.approx(0.79642857142857126, rel=1e-14)
        assert (found["lower"], found["upper"]) == pytest.approx((lower, upper), abs=apart)
        assert found["se"] == pytest.approx(0.133888, rel=0.03)
        assert found["bias"] == pytest.approx(-0.028679, abs=0.004)
    jackknifed = estimate("jackknife_yx", GPA, LSAT, statistic="spearman")
    assert jackknifed["se"] == pytest.approx(0.11152637718209794, rel=1e-13)
    assert jackknifed["bias"] == pytest.approx(-0.034102564102561184, rel=1e-10)


@pytest.mark.parametrize(
    ("statistic", "value", "bias", "se"),
    [
        # R 4.2.2, by sapply over the values left out
        ("mean", 86.857142857142861, 0.0, 25.235489533052242),
        ("median", 94.0, -87.428571428571416, 36.269400157089748),
        ("sd", 66.766829517429713, -2.3448290661048645, 17.669103951532787),
        ("trimmed_mean(0.2)", 79.0, -1.2857142857142492, 29.514697134457865),
    ],
)
def test_jackknife_of_the_mice(
    estimate: Estimate, statistic: str, value: float, bias: float, se: float
) -> None:
    found = estimate("jackknife", MOUSE_TREATMENT, statistic=statistic)
    assert found["estimate"] == pytest.approx(value, rel=1e-14)
    assert found["bias"] == pytest.approx(bias, rel=1e-12, abs=1e-12)
    assert found["se"] == pytest.approx(se, rel=1e-12)
    assert found["n"] == 7


def test_bootstrap_error_of_the_mice(estimate: Estimate) -> None:
    """Efron & Tibshirani 1993, table 2.2 (from memory): mean 23.36 in the limit, median 37.83."""
    for statistic, error in (("mean", 23.36), ("median", 37.83)):
        found = estimate(
            "bootstrap_interval", MOUSE_TREATMENT, statistic=statistic, resamples=400_000
        )
        assert found["se"] == pytest.approx(error, rel=0.004)


NUMPY: dict[str, Callable[..., object]] = {
    "mean": np.mean,
    "trimmed_mean(0.2)": lambda x, axis: scipy.stats.trim_mean(x, 0.2, axis=axis),
    "median": np.median,
    "sd": lambda x, axis: np.std(x, axis=axis, ddof=1),
    "quantile_hf(0.75)": lambda x, axis: np.quantile(x, 0.75, axis=axis),
    "iqr_scale": lambda x, axis: scipy.stats.iqr(x, axis=axis) / 1.3489795003921634,
    "gini_mean_difference": lambda x, axis: (
        (np.sort(x, axis) @ (2.0 * np.arange(x.shape[-1]) - x.shape[-1] + 1))
        / (x.shape[-1] * (x.shape[-1] - 1) / 2)
    ),
}


@pytest.mark.parametrize("statistic", NUMPY)
@pytest.mark.parametrize("method", ["percentile", "basic", "bca"])
def test_as_scipy(estimate: Estimate, statistic: str, method: str) -> None:
    """Two runs with 40,000 resamples each; limits within a tenth of a standard error."""
    x = np.array(published("rivers"))[:60]
    reference = scipy.stats.bootstrap(
        (x,),
        NUMPY[statistic],
        method="BCa" if method == "bca" else method,
        n_resamples=40_000,
        confidence_level=0.9,
        batch=2_000,
        rng=np.random.default_rng(5),
    )
    found = estimate(
        "bootstrap_interval",
        x,
        statistic=statistic,
        confidence=0.9,
        method=method,
        resamples=40_000,
        seed=3,
    )
    error = float(reference.standard_error)
    expected = reference.confidence_interval
    assert found["se"] == pytest.approx(error, rel=0.03)
    assert (found["lower"], found["upper"]) == pytest.approx(expected, abs=0.12 * error)


@pytest.mark.parametrize("statistic", NUMPY)
@pytest.mark.parametrize("n", [2, 3, 7, 40, 141])
def test_accelerations_by_leaving_out_one_by_one(statistic: str, n: int) -> None:
    x = np.sort(published("rivers"))[-n:]
    if n == 2 and statistic in ("sd", "gini_mean_difference"):
        assert math.isnan(acceleration_of(x, statistic))
        return
    left = np.array([NUMPY[statistic](np.delete(x, i), axis=-1) for i in range(n)])
    d = left.mean() - left
    squares = (d**2).sum()
    expected = (d**3).sum() / (6 * squares**1.5) if squares > 1e-18 else 0.0
    assert acceleration_of(x, statistic) == pytest.approx(expected, rel=1e-8, abs=1e-9)


def test_two_values_exactly(estimate: Estimate) -> None:
    """The mean of 0 and 1 resampled is 0, 1/2 or 1 with chances 1/4, 1/2, 1/4."""
    groups, statistic = alone([0.0, 1.0], "mean")
    draws = group_draws(groups, statistic, 100_000, np.zeros(1), Work(Control(), 1))[0]
    values, counts = np.unique(draws, return_counts=True)
    assert values.tolist() == [0.0, 0.5, 1.0]
    assert scipy.stats.chisquare(counts, np.array([0.25, 0.5, 0.25]) * 1e5).pvalue > 1e-3
    found = estimate("bootstrap_interval", [0.0, 1.0], statistic="mean", method="percentile")
    assert (found["estimate"], found["lower"], found["upper"]) == (0.5, 0.0, 1.0)
    assert estimate("jackknife", [0.0, 1.0], statistic="mean") == {
        "estimate": 0.5,
        "bias": 0.0,
        "se": 0.5,
        "n": 2,
    }


def test_jackknife_in_closed_form(estimate: Estimate) -> None:
    """The mean: sd / √n. The variance's bias is none; the sd's has no closed form."""
    for name in ("aircondit", "chem", "rivers", "quakes"):
        x = np.array(published(name))
        found = estimate("jackknife", x, statistic="mean")
        assert found["se"] == pytest.approx(x.std(ddof=1) / math.sqrt(x.size), rel=1e-12)
        assert found["bias"] == 0.0
