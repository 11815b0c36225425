"""Cell masses of the beta distribution against scipy's incomplete beta function."""

import decimal

import numpy as np
import pytest
from scipy import special

from midspread.udfs.arithmetic.beta import beta_masses
from midspread.udfs.compiling import dispatcher


def masses_and_expected(n, prob):
    a, b = (n + 1) * prob, (n + 1) * (1 - prob)
    masses = np.zeros(n)
    first, stop = dispatcher(beta_masses)(a, b, masses)
    edges = np.arange(n + 1) / n
    # scipy 1.17, special.betainc; the tail that is small is differenced, to keep its digits
    below = special.betainc(a, b, edges)
    above = special.betainc(b, a, 1 - edges)
    expected = np.where(below[1:] < 0.5, np.diff(below), -np.diff(above))
    return masses / masses.sum(), expected, first, stop


@pytest.mark.parametrize("n", [2, 3, 4, 7, 30, 50, 51, 400])
@pytest.mark.parametrize("prob", [1e-9, 0.003, 0.05, 0.2, 0.5, 0.75, 0.99, 1 - 1e-6])
def test_small_groups(n, prob):
    masses, expected, first, stop = masses_and_expected(n, prob)
    assert masses == pytest.approx(expected, rel=1e-12, abs=1e-16)
    outside = np.ones(n, bool)
    outside[first:stop] = False
    assert expected[outside].sum() < 1e-18


@pytest.mark.parametrize("n", [10_000, 1_000_000])
@pytest.mark.parametrize("prob", [0.001, 0.5, 0.9])
def test_large_groups(n, prob):
    masses, expected, first, stop = masses_and_expected(n, prob)
    # Differences of values near 1/2 have lost digits, so sums are compared; scipy itself is good
    # to about 1e-12 here.
    np.testing.assert_allclose(np.cumsum(masses), np.cumsum(expected), rtol=0, atol=2e-12)
    # Only the neighbourhood of the quantile is worked on: 20 standard deviations and a little.
    assert stop - first < 21 * np.sqrt(n * prob * (1 - prob)) + 50


def share_below(a, b, numerator, denominator):
    """The beta distribution function for whole a, b: a tail of the binomial, to 30 digits."""
    decimal.getcontext().prec = 40
    trials = a + b - 1
    odds = decimal.Decimal(numerator) / decimal.Decimal(denominator - numerator)
    mode = trials * numerator // denominator
    total = upper = decimal.Decimal(0)
    for step in (1, -1):
        term = decimal.Decimal(1)
        successes = mode
        while 0 <= successes <= trials and term > decimal.Decimal("1e-32"):
            if step == 1 or successes != mode:
                total += term
                upper += term if successes >= a else 0
            if step == 1:
                term *= odds * (trials - successes) / (successes + 1)
            else:
                term *= successes / (odds * (trials - successes + 1))
            successes += step
    return float(upper / total)


@pytest.mark.parametrize("n", [9_999, 999_999])
@pytest.mark.parametrize("prob", [0.01, 0.5, 0.9])
def test_large_groups_to_the_last_digits(n, prob):
    a = round((n + 1) * prob)
    masses = np.zeros(n)
    dispatcher(beta_masses)(float(a), float(n + 1 - a), masses)
    below = np.cumsum(masses) / masses.sum()
    for deviations in (-3, -0.5, 1.0):
        i = int(n * prob + deviations * np.sqrt(n * prob * (1 - prob)))
        assert below[i - 1] == pytest.approx(share_below(a, n + 1 - a, i, n), rel=2e-14)
