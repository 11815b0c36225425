"""Hodges-Lehmann and Gini's mean difference against R and scipy on published data."""

import itertools
import statistics
from fractions import Fraction

import pytest
from scipy.spatial.distance import pdist

from tests.conftest import Estimate
from tests.references.published import NAMES, published

# R 4.2.2, stats: m <- outer(x, x, "+") / 2; median(m[lower.tri(m, diag = TRUE)]), and
# mean(dist(x)).
R_PAIRS = {
    "abbey": (11.5, 13.662365591397849),
    "aircondit": (79.5, 133.19696969696969),
    "chem": (3.2250000000000001, 2.8309057971014493),
    "cushny": (1.3, 1.2711111111111111),
    "darwin": (25.0, 41.295238095238098),
    "faithful": (3.375, 1.2663362003472975),
    "galaxies": (21138.0, 4601.50135501355),
    "islands": (62.0, 2229.2260638297871),
    "lynx": (1395.0, 1657.3209129017234),
    "morley": (850.0, 88.602020202020199),
    "newcomb": (27.5, 8.4214452214452216),
    "ozone": (38.5, 35.276911544227886),
    "precip": (35.899999999999999, 15.406211180124224),
    "quakes": (319.5, 243.74505905905906),
    "rivers": (488.5, 428.46646403242147),
}

# R 4.2.2, stats: wilcox.test(x, conf.int = TRUE, exact = TRUE)$estimate; exact without ties.
R_WILCOXON = {"aircondit": 79.5, "darwin": 25.0, "galaxies": 21138.0}

# Hamilton's depression scale factor IV before and after, as in Hollander & Wolfe 1973 and in
# the example of R's wilcox.test.
BEFORE = (1.83, 0.50, 1.62, 2.48, 1.68, 1.88, 1.55, 3.06, 1.30)
AFTER = (0.878, 0.647, 0.598, 2.05, 1.06, 1.29, 1.06, 3.14, 1.29)


@pytest.mark.parametrize("name", R_PAIRS)
def test_published_data_as_r(estimate: Estimate, name: str) -> None:
    functions = ("hodges_lehmann", "gini_mean_difference")
    ours = [estimate(function, published(name)) for function in functions]
    assert ours == pytest.approx(R_PAIRS[name], rel=1e-14)


@pytest.mark.parametrize("name", R_WILCOXON)
def test_hodges_lehmann_as_exact_wilcoxon(estimate: Estimate, name: str) -> None:
    assert estimate("hodges_lehmann", published(name)) == pytest.approx(R_WILCOXON[name], rel=1e-15)


def test_hodges_lehmann_of_the_depression_data(estimate: Estimate) -> None:
    """Hollander & Wolfe 1973, Nonparametric Statistical Methods: the shift is −0.46."""
    differences = [after - before for before, after in zip(BEFORE, AFTER, strict=True)]
    assert estimate("hodges_lehmann", differences) == pytest.approx(-0.46, abs=1e-15)


@pytest.mark.parametrize("name", NAMES)
def test_mean_difference_as_scipy(estimate: Estimate, name: str) -> None:
    """scipy.spatial.distance.pdist forms every pair."""
    pairs = pdist([[v] for v in published(name)])
    assert estimate("gini_mean_difference", published(name)) == pytest.approx(
        pairs.mean(), rel=1e-13
    )


@pytest.mark.parametrize("name", NAMES)
def test_mean_difference_is_twice_the_second_l_moment(estimate: Estimate, name: str) -> None:
    """Hosking 1990: l2 is half of Gini's mean difference."""
    twice = 2 * estimate("l_moments", published(name))["l2"]
    assert estimate("gini_mean_difference", published(name)) == pytest.approx(twice, rel=1e-12)


def test_mean_difference_of_shifted_data_in_exact_fractions(estimate: Estimate) -> None:
    values = [1e9 + v for v in published("chem")]
    exact = [abs(Fraction(a) - Fraction(b)) for a, b in itertools.combinations(values, 2)]
    expected = float(statistics.mean(exact))
    assert estimate("gini_mean_difference", values) == pytest.approx(expected, rel=1e-15)
