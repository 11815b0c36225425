"""Qn, Sn and the medcouple against R's robustbase and statsmodels on published data."""

import functools
import math

import numpy as np
import pytest
from scipy.special import ndtri
from statsmodels.robust.scale import qn_scale as statsmodels_qn
from statsmodels.stats.stattools import medcouple as statsmodels_medcouple

from tests.conftest import Estimate
from tests.references.published import NAMES, published

approx = functools.partial(pytest.approx, rel=1e-14, abs=1e-15)

SINGLE = 2.0**-24
"""robustbase and statsmodels round some of Qn's differences to single precision; we do not."""

# R 4.2.2, robustbase 0.95-0: Qn(x), Sn(x), mc(x, doReflect = TRUE).
ROBUSTBASE = {
    "abbey": (4.2298129794029107, 4.913036544850498, 0.2),
    "aircondit": (75.637944459000011, 97.793200000000013, -0.28353658536585369),
    "chem": (0.6330337719957102, 0.79904200000000047, -0.4502281021897806),
    "cushny": (0.79904573979999993, 0.59630000000000005, 0.12499999999999997),
    "darwin": (30.376984851250228, 26.643191489361705, 0.09654686398872446),
    "faithful": (0.69406956354504157, 0.95407999999999982, -0.53843617641837183),
    "galaxies": (2730.5886433055039, 3234.3312000000001, 0.21060877350044763),
    "islands": (35.012703585374695, 34.5854, 0.76303317535545023),
    "lynx": (864.09945857640855, 864.6350000000001, 0.61400695001336536),
    "morley": (85.601853343348225, 83.482000000000014, 0.052631578947368418),
    "newcomb": (6.3034050200903806, 4.7704000000000004, 0.0),
    "ozone": (23.657374244024762, 26.237200000000001, 0.37179487179487181),
    "precip": (12.434790318231855, 12.880080000000001, -0.11971830985915499),
    "quakes": (154.77061831198807, 243.29040000000003, 0.31597222222222221),
    "rivers": (215.05592172492138, 214.84676231263384, 0.43859649122807015),
}

# The same for the first n values of rivers: every correction for small samples.
ROBUSTBASE_SMALL = {
    2: (367.78415264359995, 367.73224700000003, 0.0),
    3: (11.025242304999999, 11.037513000000002, 0.48795180722891568),
    4: (81.999708436800006, 81.917308800000001, 0.40722891566265063),
    5: (134.8542973008, 116.00658720000001, 0.32663316582914576),
    6: (169.81968849999998, 148.03147500000003, 0.035175879396984924),
    7: (238.216357225, 185.735524, 0.38186893917131942),
    8: (282.467007438, 227.72696999999999, 0.27995983935742969),
    9: (251.97713340800001, 195.58043700000002, 0.0),
    10: (223.73280714399999, 226.59400000000002, 0.036363636363636362),
    11: (256.48331909199999, 188.33633663366339, 0.081168831168831168),
    12: (218.50961732600001, 166.96400000000003, 0.15061206645292918),
    13: (224.26207673151328, 172.97628099173554, 0.3),
    14: (198.71131127192481, 161.001, 0.50877192982456143),
    15: (230.86508486950174, 177.62127659574472, 0.38254003070848869),
    16: (242.00315661902198, 178.89000000000001, 0.34099326599326601),
    17: (255.4703792786627, 182.59372670807454, 0.43113772455089822),
    23: (268.74716620626521, 229.61597285067873, 0.27628758849126456),
    24: (258.96836127097265, 226.59400000000002, 0.37019230769230771),
}

# The same for the first n values of quakes, whose depths are heavily tied.
ROBUSTBASE_TIED = {
    99: (163.82122222235165, 252.74366972477071, 0.12617702448210924),
    100: (166.92361401952903, 250.44600000000003, 0.13034188034188035),
    501: (163.69436412837544, 249.70196640671867, 0.27918781725888325),
    998: (154.7694812422863, 242.09780000000003, 0.31398416886543534),
    999: (155.0914449918865, 242.31610279531111, 0.31349206349206349),
}


def check(estimate: Estimate, values: tuple[float, ...], expected: tuple[float, ...]) -> None:
    qn, sn, mc = expected
    assert estimate("qn_scale", values) == pytest.approx(qn, rel=SINGLE)
    assert estimate("sn_scale", values) == approx(sn)
    assert estimate("medcouple", values) == approx(mc)


@pytest.mark.parametrize("name", ROBUSTBASE)
def test_published_data_as_robustbase(estimate: Estimate, name: str) -> None:
    check(estimate, published(name), ROBUSTBASE[name])


@pytest.mark.parametrize("n", ROBUSTBASE_SMALL)
def test_small_samples_as_robustbase(estimate: Estimate, n: int) -> None:
    check(estimate, published("rivers")[:n], ROBUSTBASE_SMALL[n])


@pytest.mark.parametrize("n", ROBUSTBASE_TIED)
def test_ties_as_robustbase(estimate: Estimate, n: int) -> None:
    check(estimate, published("quakes")[:n], ROBUSTBASE_TIED[n])


def _qn_factor(n: int) -> float:
    """Qn's correction for n > 12, Maechler's fit as robustbase 0.95-0 prints it (Qn.finite.c)."""
    if n % 2 == 1:
        return 1 + (1.60188 + (-2.1284 - 5.172 / n) / n) / n
    return 1 + (3.67561 + (1.9654 + (6.987 - 77 / n) / n) / n) / n


@pytest.mark.parametrize("name", [n for n in NAMES if len(published(n)) > 12])
def test_qn_as_statsmodels_uncorrected(estimate: Estimate, name: str) -> None:
    """statsmodels 0.15.0, which corrects nothing for small samples."""
    values = np.array(published(name))
    expected = 2.21914 * statsmodels_qn(values, c=1.0) / _qn_factor(values.size)
    assert estimate("qn_scale", values) == pytest.approx(expected, rel=SINGLE)


@pytest.mark.parametrize("name", NAMES)
def test_medcouple_as_statsmodels(estimate: Estimate, name: str) -> None:
    """statsmodels 0.15.0's quadratic form, which follows the definition pair by pair."""
    values = np.array(published(name))
    expected = statsmodels_medcouple(values, use_fast=False)
    assert estimate("medcouple", values) == approx(float(expected))


def test_medcouple_of_chem_as_published(estimate: Estimate) -> None:
    # R 4.2, robustbase: mc(chem, doReflect = TRUE), to the six digits usually printed.
    assert round(estimate("medcouple", published("chem")), 6) == -0.450228


def test_normal_data_give_the_standard_deviation(estimate: Estimate) -> None:
    """Rousseeuw & Croux 1993: both scales estimate sigma of a normal distribution."""
    grid = [_normal_quantile((i - 0.5) / 20_000) * 7 + 1e4 for i in range(1, 20_001)]
    assert estimate("qn_scale", grid) == pytest.approx(7, rel=1e-3)
    assert estimate("sn_scale", grid) == pytest.approx(7, rel=1e-3)
    assert abs(estimate("medcouple", grid)) < 1e-9
    # David 1968: the mean difference of a normal distribution is 2 sigma / sqrt(pi).
    assert estimate("gini_mean_difference", grid) == pytest.approx(
        14 / math.sqrt(math.pi), rel=1e-3
    )


def _normal_quantile(p: float) -> float:
    return float(ndtri(p))
