"""Trimmed and winsorized means and the trimean against R, scipy, NIST and worked examples."""

import functools
import math
import statistics
from fractions import Fraction

import numpy as np
import pytest
import scipy.stats

from tests.conftest import Estimate
from tests.references.published import NAMES, certified, published

approx = functools.partial(pytest.approx, abs=0.0)

SHARES = (0.0, 0.05, 0.1, 0.2, 0.25, 0.4, 0.5)

# R 4.2.2, base: mean(x, trim = share), at SHARES.
R_TRIMMED_MEANS = {
    "abbey": (
        16.006451612903227,
        12.620689655172415,
        11.624000000000001,
        11.08421052631579,
        10.952941176470588,
        10.571428571428571,
        11.0,
    ),
    "aircondit": (108.08333333333333, 108.08333333333333, 80.7, 71.5, 72.5, 79.25, 88.0),
    "chem": (
        4.2804166666666665,
        3.2536363636363639,
        3.205,
        3.2393749999999999,
        3.2691666666666666,
        3.2833333333333332,
        3.385,
    ),
    "cushny": (1.58, 1.58, 1.4, 1.3333333333333333, 1.3333333333333333, 1.3, 1.3),
    "islands": (
        1252.7291666666667,
        718.4545454545455,
        385.025,
        65.6,
        51.083333333333336,
        39.2,
        41.0,
    ),
    "newcomb": (
        26.212121212121211,
        27.4,
        27.425925925925927,
        27.35,
        27.264705882352942,
        27.285714285714285,
        27.0,
    ),
    "quakes": (
        311.371,
        308.07777777777778,
        305.3875,
        299.23666666666668,
        294.966,
        264.525,
        247.0,
    ),
    "rivers": (
        591.18439716312059,
        519.03937007874015,
        490.94690265486724,
        459.97647058823532,
        449.91549295774649,
        429.9655172413793,
        425.0,
    ),
}

# R 4.2.2, stats: f <- fivenum(x); (f[2] + 2 f[3] + f[4]) / 4.
R_TRIMEANS = {
    "abbey": 11.25,
    "aircondit": 75.875,
    "chem": 3.305,
    "cushny": 1.35,
    "darwin": 26.0,
    "faithful": 3.65425,
    "galaxies": 21100.5,
    "islands": 71.375,
    "lynx": 1116.0,
    "morley": 850.0,
    "newcomb": 27.25,
    "ozone": 36.125,
    "precip": 36.275,
    "quakes": 284.0,
    "rivers": 460.0,
}


@pytest.mark.parametrize("name", R_TRIMMED_MEANS)
def test_trimmed_mean_as_r(estimate: Estimate, name: str) -> None:
    ours = [estimate("trimmed_mean", published(name), share=share) for share in SHARES]
    assert ours == approx(R_TRIMMED_MEANS[name], rel=1e-14)


@pytest.mark.parametrize("name", NAMES)
def test_trimmed_mean_as_scipy(estimate: Estimate, name: str) -> None:
    x = published(name)
    for share in (0.01, 0.07, 0.13, 0.29, 0.33, 0.37, 0.49):
        if len(x) > 2 * int(share * len(x)):
            expected = scipy.stats.trim_mean(x, share)
            assert estimate("trimmed_mean", x, share=share) == approx(expected, rel=1e-14)


@pytest.mark.parametrize(("share", "n", "cut"), [(0.29, 100, 28), (0.07, 100, 7), (0.1, 30, 3)])
def test_share_times_n_is_taken_in_double(
    estimate: Estimate, share: float, n: int, cut: int
) -> None:
    """0.29 · 100 is 28.999999999999996 in double, and R and scipy cut 28."""
    x = [float(i**3) for i in range(n)]
    assert estimate("trimmed_mean", x, share=share) == approx(
        math.fsum(x[cut : n - cut]) / (n - 2 * cut), rel=1e-14
    )
    assert scipy.stats.trim_mean(x, share) == approx(
        math.fsum(x[cut : n - cut]) / (n - 2 * cut), rel=1e-14
    )


@pytest.mark.parametrize("name", NAMES)
def test_half_trimmed_is_the_median(estimate: Estimate, name: str) -> None:
    """numpy.median; by declaration, whatever ⌊0.5 · n⌋ leaves."""
    for function in ("trimmed_mean", "winsorized_mean"):
        assert estimate(function, published(name), share=0.5) == np.median(published(name))


@pytest.mark.parametrize("name", NAMES)
def test_winsorized_mean_as_scipy(estimate: Estimate, name: str) -> None:
    x = published(name)
    for share in (0.0, 0.05, 0.1, 0.2, 0.29, 0.4, 0.45):
        expected = scipy.stats.mstats.winsorize(np.array(x), limits=(share, share)).mean()
        assert estimate("winsorized_mean", x, share=share) == approx(expected, rel=1e-14)


@pytest.mark.parametrize("name", R_TRIMEANS)
def test_trimean_as_r(estimate: Estimate, name: str) -> None:
    assert estimate("trimean", published(name)) == approx(R_TRIMEANS[name], rel=1e-15)


@pytest.mark.parametrize("name", NAMES)
def test_trimean_from_the_medians_of_the_halves(estimate: Estimate, name: str) -> None:
    """Tukey's fourths are the medians of the halves, the median belonging to both (1977)."""
    x = sorted(published(name))
    half = (len(x) + 1) // 2
    low, middle, high = map(statistics.median, (x[:half], x, x[-half:]))
    assert estimate("trimean", x) == approx((low + 2 * middle + high) / 4, rel=1e-15)


# Wilcox, Introduction to Robust Estimation and Hypothesis Testing, ch. 3, quoted from memory.
WILCOX_NINE = (12, 45, 23, 79, 19, 92, 30, 58, 132)
SELF_AWARENESS = (
    *(77, 87, 88, 114, 151, 210, 219, 246, 253, 262),
    *(296, 299, 306, 376, 428, 515, 666, 1310, 2611),
)


def test_wilcox_examples(estimate: Estimate) -> None:
    """Printed figures: trimmed means 49.4 and 282.7, mean 448, median 262."""
    assert round(estimate("trimmed_mean", WILCOX_NINE, share=0.2), 1) == 49.4
    assert round(estimate("trimmed_mean", SELF_AWARENESS, share=0.2), 1) == 282.7
    assert round(estimate("trimmed_mean", SELF_AWARENESS, share=0.0)) == 448
    assert estimate("trimmed_mean", SELF_AWARENESS, share=0.5) == 262


@pytest.mark.parametrize("name", certified())
def test_mean_as_certified(estimate: Estimate, name: str) -> None:
    """Share 0 is the mean, to the last bit of what NIST certifies and of exact fractions."""
    data = certified()[name]
    exact = sum(map(Fraction, data.values)) / len(data.values)
    assert estimate("trimmed_mean", data.values, share=0.0) == float(exact) == data.mean
    assert estimate("winsorized_mean", data.values, share=0.0) == data.mean


@pytest.mark.parametrize("shift", [0.0, 1e6, 1e9, -1e12])
@pytest.mark.parametrize("share", [0.0, 0.1, 0.37])
def test_means_of_shifted_data_as_exact_fractions(
    estimate: Estimate, generator: np.random.Generator, shift: float, share: float
) -> None:
    x = np.sort(generator.lognormal(3.0, 1.0, 501) + shift)
    g = int(share * x.size)
    exact = [Fraction(v) for v in x]
    middle = exact[g : x.size - g]
    winsorized = [middle[0]] * g + middle + [middle[-1]] * g
    shuffled = generator.permutation(x).tolist()
    for function, values in (("trimmed_mean", middle), ("winsorized_mean", winsorized)):
        expected = float(sum(values) / len(values))
        assert estimate(function, shuffled, share=share) == approx(expected, rel=2.3e-16)
