"""Skewness and tail weight from quantiles, and the fences, against R, robustbase, statsmodels."""

import functools
import math

import numpy as np
import pytest
import scipy.stats
from statsmodels.stats.stattools import medcouple, robust_kurtosis, robust_skewness

from tests.conftest import Estimate
from tests.references.published import NAMES, published

approx = functools.partial(pytest.approx, abs=0.0)

# R 4.2.2, stats: q <- quantile(x, (1:7)/8), combined as defined: bowley, octile, moors.
R_SHAPES = {
    "abbey": (0.14285714285714285, 0.36, 1.1214285714285717),
    "aircondit": (-0.57723577235772361, 0.11914323962516733, 1.494579945799458),
    "chem": (-0.3189189189189186, -0.50525310410697144, 0.9743243243243237),
    "cushny": (0.23076923076923059, 0.36666666666666686, 2.115384615384615),
    "darwin": (0.23529411764705882, 0.023255813953488372, 1.5735294117647058),
    "faithful": (-0.60353480253109315, -0.53170863067187246, 0.84371590661139018),
    "galaxies": (0.27714523743404612, 0.20262812089356111, 0.98941266314912524),
    "islands": (0.74807987711213519, 0.98287025653634952, 18.533026113671276),
    "lynx": (0.61888663511381559, 0.64424216927372169, 0.98044850123957628),
    "morley": (0.0, 0.052631578947368418, 1.661764705882353),
    "newcomb": (0.1111111111111111, 0.090909090909090912, 1.2407407407407407),
    "ozone": (0.40331491712707185, 0.45263157894736844, 1.1187845303867403),
    "precip": (-0.078358208955224801, -0.29172932330827078, 1.9654850746268668),
    "quakes": (0.33333333333333331, 0.29678638941398866, 0.57010135135135132),
    "rivers": (0.3783783783783784, 0.52276064610866368, 1.3891891891891892),
}

# R 4.2.2, grDevices: boxplot.stats(x, coef)$stats[c(1, 5)] at 1.5, and length($out) at 1.5 and 3.
R_WHISKERS = {
    "abbey": (5.2, 24.0, 3, 1),
    "aircondit": (3.0, 230.0, 1, 1),
    "chem": (2.2, 3.77, 2, 1),
    "cushny": (0.0, 2.4, 1, 1),
    "darwin": (6.0, 75.0, 2, 0),
    "faithful": (1.6, 5.1, 0, 0),
    "galaxies": (16084.0, 26995.0, 10, 1),
    "islands": (12.0, 306.0, 8, 8),
    "lynx": (39.0, 4950.0, 4, 0),
    "morley": (720.0, 1000.0, 3, 0),
    "newcomb": (16.0, 40.0, 2, 2),
    "ozone": (1.0, 122.0, 2, 0),
    "precip": (11.5, 59.8, 5, 0),
    "quakes": (40.0, 680.0, 0, 0),
    "rivers": (135.0, 1205.0, 11, 5),
}

# R 4.2.2, robustbase 0.95-0: adjboxStats(x, doReflect = TRUE), $fence and length($out).
ROBUSTBASE_FENCES = {
    "abbey": (3.2820458767691738, 34.132247404100347, 1),
    "aircondit": (-347.44011226211137, 164.46085582021112, 2),
    "chem": (-2.7505941863772376, 3.9353360950140908, 2),
    "cushny": (0.27216320834483976, 3.5459896975418417, 2),
    "darwin": (-23.661798640092556, 113.1333098293173, 2),
    "faithful": (-15.193065975927354, 4.8588682723242211, 10),
    "galaxies": (17153.691755018681, 33580.891735488141, 10),
    "islands": (8.4099682471578934, 2603.1486544812005, 7),
    "lynx": (57.82533153632852, 23700.454328133386, 3),
    "morley": (695.62870578412242, 1053.0907942734161, 3),
    "newcomb": (13.5, 41.5, 2),
    "ozone": (2.574870782781808, 271.71309479035028, 1),
    "precip": (-0.3300385025386241, 55.530334662558147, 4),
    "quakes": (-89.180344383429798, 2261.4986955166469, 0),
    "rivers": (213.97753746529824, 2748.8694702561002, 5),
}


@pytest.mark.parametrize("name", R_SHAPES)
def test_quantile_shapes_as_r(estimate: Estimate, name: str) -> None:
    functions = ("bowley_skew", "octile_skew", "moors_kurtosis")
    ours = [estimate(function, published(name)) for function in functions]
    # R's Q(1−p) + Q(p) − 2 Q(1/2) cancels, which costs it a digit.
    assert ours == approx(R_SHAPES[name], rel=2e-14)


@pytest.mark.parametrize("name", NAMES)
def test_bowley_and_moors_as_statsmodels(estimate: Estimate, name: str) -> None:
    x = np.array(published(name))
    assert estimate("bowley_skew", x) == pytest.approx(robust_skewness(x)[1], rel=2e-15)
    moors = robust_kurtosis(x, excess=False)[1]
    assert estimate("moors_kurtosis", x) == approx(float(moors), rel=4e-15)


def test_on_the_quantiles_of_known_distributions(estimate: Estimate) -> None:
    """Values placed so that the octiles fall on the distribution's own.

    Normal: Moors 1988 gives 1.233 (quoted from memory). Exponential: in closed form, with
    Q(p) = −ln(1 − p).
    """
    probs = np.arange(1, 8) / 8
    normal = scipy.stats.norm.ppf(probs).tolist()
    padded = [2 * normal[0], *normal, 2 * normal[-1]]
    assert estimate("moors_kurtosis", padded) == pytest.approx(1.233, abs=5e-4)
    assert estimate("octile_skew", padded) == pytest.approx(0.0, abs=1e-15)

    exponential = [0.0, *(-np.log1p(-probs)).tolist(), 9.0]
    assert estimate("bowley_skew", exponential) == approx(math.log(4 / 3) / math.log(3), rel=1e-14)
    assert estimate("octile_skew", exponential) == approx(math.log(16 / 7) / math.log(7), rel=1e-14)
    assert estimate("moors_kurtosis", exponential) == approx(
        math.log(3 * 7 / 5) / math.log(3), rel=1e-14
    )

    uniform = [float(i) for i in range(9)]
    assert estimate("bowley_skew", uniform) == estimate("octile_skew", uniform) == 0.0
    assert estimate("moors_kurtosis", uniform) == 1.0


@pytest.mark.parametrize("name", R_WHISKERS)
def test_fences_as_whiskers_of_r(estimate: Estimate, name: str) -> None:
    """The whiskers end at the last values within the fences."""
    x = np.array(published(name))
    low, high, outside, far_out = R_WHISKERS[name]
    fences = estimate("fences", x)
    inside = x[(x >= fences["lower"]) & (x <= fences["upper"])]
    assert (inside.min(), inside.max(), x.size - inside.size) == (low, high, outside)
    far = estimate("fences", x, k=3)
    assert np.sum((x < far["lower"]) | (x > far["upper"])) == far_out


# R 4.2.2, stats: fivenum(x)[c(2, 4)]; fences at k follow from the definition.
R_FOURTHS = {
    "abbey": (8.0, 15.0),
    "aircondit": (12.5, 115.0),
    "chem": (2.75, 3.7),
    "islands": (20.0, 183.5),
    "newcomb": (24.0, 31.0),
    "quakes": (99.0, 543.0),
}


@pytest.mark.parametrize("name", R_FOURTHS)
@pytest.mark.parametrize("k", [0.0, 1.0, 1.5, 2.2, 3.0])
def test_fences_from_the_fourths_of_r(estimate: Estimate, name: str, k: float) -> None:
    low, high = R_FOURTHS[name]
    fences = estimate("fences", published(name), k=k)
    assert fences["lower"] == pytest.approx(low - k * (high - low), rel=1e-15)
    assert fences["upper"] == pytest.approx(high + k * (high - low), rel=1e-15)


@pytest.mark.parametrize("name", ROBUSTBASE_FENCES)
def test_adjusted_fences_as_robustbase(estimate: Estimate, name: str) -> None:
    x = np.array(published(name))
    low, high, outside = ROBUSTBASE_FENCES[name]
    fences = estimate("adjusted_fences", x)
    assert (fences["lower"], fences["upper"]) == approx((low, high), rel=1e-13)
    assert np.sum((x < fences["lower"]) | (x > fences["upper"])) == outside


@pytest.mark.parametrize("name", [name for name in NAMES if name != "quakes"])
def test_adjusted_fences_with_the_medcouple_of_statsmodels(estimate: Estimate, name: str) -> None:
    """Its medcouple takes all pairs at once, by a definition of its own for ties."""
    x = np.sort(published(name))
    half = (x.size + 1) // 2
    low, high = float(np.median(x[:half])), float(np.median(x[-half:]))
    skew = float(medcouple(x))
    down, up = (-4, 3) if skew >= 0 else (-3, 4)
    fences = estimate("adjusted_fences", x)
    assert fences["lower"] == approx(low - 1.5 * math.exp(down * skew) * (high - low), rel=1e-9)
    assert fences["upper"] == approx(high + 1.5 * math.exp(up * skew) * (high - low), rel=1e-9)


@pytest.mark.parametrize("name", ["chem", "rivers", "aircondit"])
def test_adjusted_fences_mirror(estimate: Estimate, name: str) -> None:
    """Hubert & Vandervieren 2008: the exponents change places with the sign of the medcouple."""
    x = np.array(published(name))
    fences, mirrored = estimate("adjusted_fences", x), estimate("adjusted_fences", -x)
    assert (-mirrored["upper"], -mirrored["lower"]) == approx(
        (fences["lower"], fences["upper"]), rel=1e-13
    )
