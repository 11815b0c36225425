"""MAD, interquartile and winsorized scales against R, scipy, statsmodels, NIST and examples."""

import functools
import math
from fractions import Fraction

import numpy as np
import pytest
import scipy.stats
import statsmodels.robust.scale

from tests.conftest import Estimate
from tests.references.published import NAMES, certified, published
from tests.references.test_location import SELF_AWARENESS, WILCOX_NINE

approx = functools.partial(pytest.approx, abs=0.0)

SHARES = (0.0, 0.05, 0.1, 0.2, 0.29, 0.4, 0.45)

# R 4.2.2, stats: mad(x, constant = 1/qnorm(3/4)) and IQR(x) / (2 qnorm(3/4)).
R_SCALES = {
    "abbey": (4.4478066555168061, 5.1891077647696067),
    "aircondit": (85.249627564072114, 68.385027328570885),
    "chem": (0.52632378756948872, 0.68570352605884144),
    "cushny": (0.59304088740224081, 0.48184572101432072),
    "darwin": (25.204237714595234, 25.204237714595234),
    "faithful": (0.95108932317134398, 1.6986914918527936),
    "galaxies": (2373.6461518274687, 2669.4252944193363),
    "islands": (39.288958790398453, 120.64675553089336),
    "lynx": (977.0348619951917, 1644.5765108773389),
    "morley": (66.717099832752098, 63.010594286488086),
    "newcomb": (4.4478066555168061, 5.003782487456407),
    "ozone": (25.945538823848036, 33.543875193689246),
    "precip": (9.5627843093611347, 9.9334348639875234),
    "quakes": (277.2466148605476, 329.13769250824362),
    "rivers": (214.97732168331228, 274.28141042353639),
}


@pytest.mark.parametrize("name", R_SCALES)
def test_mad_and_iqr_as_r(estimate: Estimate, name: str) -> None:
    ours = [estimate(function, published(name)) for function in ("mad_scale", "iqr_scale")]
    assert ours == approx(R_SCALES[name], rel=2e-15)


@pytest.mark.parametrize("name", NAMES)
def test_mad_and_iqr_as_scipy_and_statsmodels(estimate: Estimate, name: str) -> None:
    x = np.array(published(name))
    mad, iqr = estimate("mad_scale", x), estimate("iqr_scale", x)
    normal = {"scale": "normal"}
    assert mad == approx(scipy.stats.median_abs_deviation(x, **normal), rel=2e-15)
    assert iqr == approx(scipy.stats.iqr(x, **normal), rel=2e-15)
    assert mad == approx(statsmodels.robust.scale.mad(x), rel=2e-15)
    assert iqr == approx(statsmodels.robust.scale.iqr(x), rel=2e-15)


def winsorized(x: tuple[float, ...], share: float) -> np.ndarray:
    return np.asarray(scipy.stats.mstats.winsorize(np.array(x), limits=(share, share)))


@pytest.mark.parametrize("name", NAMES)
def test_winsorized_sd_as_scipy(estimate: Estimate, name: str) -> None:
    x = published(name)
    for share in SHARES:
        expected = winsorized(x, share).std(ddof=1)
        assert estimate("winsorized_sd", x, share=share) == pytest.approx(
            expected, rel=1e-13, abs=1e-15
        )


@pytest.mark.parametrize("name", NAMES)
def test_standard_error_as_scipy(estimate: Estimate, name: str) -> None:
    """scipy.stats.mstats.trimmed_stde is s_w / ((1 − 2·share) √n); Yuen's takes h (h − 1)."""
    x = published(name)
    n = len(x)
    for share in (0.1, 0.2, 0.25):
        h = n - 2 * int(share * n)
        theirs = float(scipy.stats.mstats.trimmed_stde(np.array(x), limits=(share, share)))
        theirs *= (1 - 2 * share) * math.sqrt(n) * math.sqrt((n - 1) / (h * (h - 1)))
        assert estimate("trimmed_mean_se", x, share=share) == approx(theirs, rel=1e-13)


@pytest.mark.parametrize("share", [0.0, 0.1, 0.2, 0.32])
def test_standard_error_in_the_test_of_yuen(estimate: Estimate, share: float) -> None:
    """Unequal variances: t = (difference of trimmed means) / √(se² + se²), as in Yuen 1974.

    scipy.stats.ttest_ind(trim=…) computes t by itself.
    """
    for first, second in (("darwin", "cushny"), ("rivers", "precip"), ("chem", "newcomb")):
        samples = published(first), published(second)
        means = [estimate("trimmed_mean", x, share=share) for x in samples]
        errors = [estimate("trimmed_mean_se", x, share=share) for x in samples]
        expected = scipy.stats.ttest_ind(*samples, trim=share, equal_var=False).statistic
        t = (means[0] - means[1]) / math.hypot(*errors)
        assert t == approx(float(expected), rel=1e-12)


def test_example_of_yuens_test(estimate: Estimate) -> None:
    """scipy's documentation of ttest_ind, with trim 0.2: t = 3.4463884028073513 (from memory).

    The pooled test; its variance is that of the winsorized sums of squares.
    """
    a, b = (56, 128.6, 12, 123.8, 64.34, 78, 763.3), (1.1, 2.9, 4.2)
    means, squares, kept = [], [], []
    for x in (a, b):
        h = len(x) - 2 * int(0.2 * len(x))
        means.append(estimate("trimmed_mean", x, share=0.2))
        squares.append(estimate("trimmed_mean_se", x, share=0.2) ** 2 * h * (h - 1))
        kept.append(h)
    pooled = sum(squares) / (sum(kept) - 2) * sum(1 / h for h in kept)
    assert (means[0] - means[1]) / math.sqrt(pooled) == approx(3.4463884028073513, rel=1e-14)


def test_wilcox_examples(estimate: Estimate) -> None:
    """Wilcox, Introduction to Robust Estimation, ch. 3, printed figures quoted from memory.

    The winsorized variance 937.9; the standard error 56.1 in his form s_w / ((1 − 2·share) √n).
    """
    assert round(estimate("winsorized_sd", WILCOX_NINE, share=0.2) ** 2, 1) == 937.9
    n, h = len(SELF_AWARENESS), len(SELF_AWARENESS) - 6
    in_his_form = estimate("winsorized_sd", SELF_AWARENESS, share=0.2) / (0.6 * math.sqrt(n))
    assert round(in_his_form, 1) == 56.1
    assert estimate("trimmed_mean_se", SELF_AWARENESS, share=0.2) == approx(
        in_his_form * 0.6 * math.sqrt(n * (n - 1) / (h * (h - 1))), rel=1e-14
    )


@pytest.mark.parametrize("name", certified())
def test_standard_deviation_as_certified(estimate: Estimate, name: str) -> None:
    """Share 0 is the plain standard deviation.

    It agrees with NIST's to the digits that survive rounding the data, and with exact fractions
    of the rounded data to the last.
    """
    data = certified()[name]
    n = len(data.values)
    ours = estimate("winsorized_sd", data.values, share=0.0)
    assert ours == approx(data.sd, rel=10.0**-data.sd_digits)
    exact = [Fraction(v) for v in data.values]
    mean = sum(exact) / n
    variance = sum((v - mean) ** 2 for v in exact) / (n - 1)
    assert ours == approx(math.sqrt(variance), rel=1e-15)
    error = estimate("trimmed_mean_se", data.values, share=0.0)
    assert error == approx(math.sqrt(variance / n), rel=1e-15)


@pytest.mark.parametrize("shift", [0.0, 1e6, 1e9, -1e12])
@pytest.mark.parametrize("share", [0.0, 0.1, 0.37])
def test_scales_of_shifted_data_as_exact_fractions(
    estimate: Estimate, generator: np.random.Generator, shift: float, share: float
) -> None:
    x = np.sort(generator.lognormal(3.0, 1.0, 501) + shift)
    g = int(share * x.size)
    kept = [Fraction(v) for v in x[g : x.size - g]]
    values = [kept[0]] * g + kept + [kept[-1]] * g
    mean = sum(values) / x.size
    variance = sum((v - mean) ** 2 for v in values) / (x.size - 1)
    shuffled = generator.permutation(x).tolist()
    assert estimate("winsorized_sd", shuffled, share=share) == approx(
        math.sqrt(variance), rel=4e-16
    )
    middle = sorted(Fraction(v) for v in x)[x.size // 2]
    mad = sorted(abs(Fraction(v) - middle) for v in x)[x.size // 2]
    assert estimate("mad_scale", shuffled) == approx(
        float(mad) / scipy.stats.norm.ppf(0.75), rel=4e-16
    )


def test_no_standard_error_of_a_median_or_of_one_kept_value(estimate: Estimate) -> None:
    """As functions.md defines: NULL at share 0.5 and where fewer than two values are kept."""
    x = published("cushny")
    assert estimate("trimmed_mean_se", x, share=0.5) is None
    assert estimate("trimmed_mean_se", (3.0, 4.0, 9.0), share=0.34) is None
    assert estimate("trimmed_mean_se", (3.0, 4.0, 9.0), share=0.33) is not None
    assert estimate("winsorized_sd", x, share=0.5) == 0.0
