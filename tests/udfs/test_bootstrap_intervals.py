"""Draws to limits: exact cases worked by hand, ties, missing draws, no width."""

import math

import numpy as np
import pytest

from midspread.udfs.declaring import NULL
from midspread.udfs.resampling.intervals import METHODS, Intervals, acceleration, intervals

ONE = np.array([1.0])


def limits(method: str, estimate: float, draws: list[float], **given: object) -> Intervals:
    confidence = np.array([given.pop("confidence", 0.9)], dtype=np.float64)
    if method == "bca":
        given.setdefault("accelerations", np.array([0.0]))
    if method == "studentized":
        given.setdefault("errors", ONE)
        given.setdefault("draw_errors", np.ones((1, len(draws))))
    return intervals(method, np.array([estimate]), np.array([draws]), confidence, **given)  # type: ignore[arg-type]


def ends(found: Intervals) -> tuple[float, float]:
    return float(found.lower[0]), float(found.upper[0])


def test_whole_positions_are_order_statistics() -> None:
    """R = 19: (R + 1) · 0.05 = 1 and (R + 1) · 0.95 = 19."""
    draws = [float(v) for v in np.random.default_rng(1).permutation(19)]
    assert ends(limits("percentile", 9.0, draws)) == (0.0, 18.0)
    assert ends(limits("basic", 8.0, draws)) == (-2.0, 16.0)
    assert ends(limits("studentized", 8.0, draws)) == (-2.0, 16.0)
    assert ends(limits("percentile", 9.0, draws, confidence=0.8)) == (1.0, 17.0)
    assert ends(limits("bca", 9.0, draws, confidence=0.8)) == pytest.approx((1.0, 17.0), abs=1e-9)


def test_normal_limits_take_off_the_bias() -> None:
    found = limits("normal", 2.0, [1.0, 3.0, 5.0])
    assert (found.bias[0], found.se[0]) == (1.0, 2.0)
    reach = 1.6448536269514722 * 2.0
    assert ends(found) == pytest.approx((1.0 - reach, 1.0 + reach), rel=1e-14)


def test_between_draws_on_the_normal_scale() -> None:
    """Davison & Hinkley 1997, equation 5.6, with qnorm written out: R = 9, p = 0.25."""
    z2, z25, z3 = -0.8416212335729143, -0.6744897501960817, -0.5244005127080407
    expected = 2.0 + (z25 - z2) / (z3 - z2) * (7.0 - 2.0)
    draws = [1.0, 2.0, 7.0, 8.0, 9.0, 10.0, 11.0, 12.0, 13.0]
    assert limits("percentile", 0.0, draws, confidence=0.5).lower[0] == pytest.approx(
        expected, rel=1e-13
    )


def test_ties_with_the_estimate_count_half() -> None:
    """Draws symmetric around the estimate, half of them equal to it, need no correction."""
    draws = [-2.0] * 10 + [0.0] * 39 + [2.0] * 10
    assert ends(limits("bca", 0.0, draws)) == ends(limits("percentile", 0.0, draws))


def test_bca_by_hand() -> None:
    """Efron 1987 with z0 = Φ⁻¹(0.6) and a = 0.05, Φ from Python's own erf."""
    draws = np.arange(1.0, 1000.0)
    z0, a, z = 0.2533471031357997, 0.05, 1.6448536269514722
    found = limits("bca", 599.9, draws.tolist(), accelerations=np.array([a]))
    share = 599 / 999
    assert share == pytest.approx(0.6, abs=5e-4)
    for end, limit in ((-z, found.lower[0]), (z, found.upper[0])):
        inner = z0 + (z0 + end) / (1 - a * (z0 + end))
        prob = 0.5 * math.erfc(-inner / math.sqrt(2.0))
        assert limit == pytest.approx(1000 * prob, abs=1.2)


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("value", [0.0, 0.1, -1e300, math.inf, 1e9 + 0.1])
def test_equal_draws_leave_no_width(method: str, value: float) -> None:
    errors = {"errors": np.zeros(1), "draw_errors": np.zeros((1, 7))}
    found = limits(method, value, [value] * 7, **(errors if method == "studentized" else {}))
    assert ends(found) == (value, value)
    assert (found.se[0], found.bias[0], found.resamples[0]) == (0.0, 0.0, 7.0)


@pytest.mark.parametrize("method", METHODS)
def test_draws_without_a_value_are_left_out(method: str) -> None:
    draws = [3.0, 1.0, 8.0, 2.0, 5.0]
    found = limits(method, 3.0, [NULL, *draws[:2], NULL, *draws[2:]])
    whole = limits(method, 3.0, draws)
    for name, values in vars(whole).items():
        assert getattr(found, name)[0] == values[0]
    assert found.resamples[0] == 5
    spoilt = limits(method, 3.0, [*draws, math.nan, NULL])
    assert math.isnan(spoilt.lower[0]) and math.isnan(spoilt.se[0])
    nothing = limits(method, 3.0, [NULL, NULL])
    assert math.isnan(nothing.lower[0]) and nothing.resamples[0] == 0


@pytest.mark.parametrize("method", METHODS)
def test_rows_do_not_touch_one_another(method: str, generator: np.random.Generator) -> None:
    draws = generator.normal(size=(40, 199)).round(2)
    draws[3, 5:90], draws[7, 1] = NULL, math.nan
    estimates, confidence = draws[:, 0].copy(), generator.uniform(0.5, 0.99, 40)
    estimates[7] = 0.0
    more = {
        "accelerations": generator.uniform(-0.1, 0.1, 40),
        "errors": generator.uniform(0.1, 1.0, 40),
    }
    own = generator.uniform(0.0, 1.0, draws.shape).round(2)

    def some(rows: slice) -> Intervals:
        part = {name: values[rows] for name, values in more.items()}
        return intervals(
            method,
            estimates[rows],
            draws[rows].copy(),
            confidence[rows],
            draw_errors=own[rows].copy(),
            **part,
        )

    together = some(slice(None))
    for row in range(40):
        for name, values in vars(some(slice(row, row + 1))).items():
            assert values.tobytes() == getattr(together, name)[row : row + 1].tobytes(), name


@pytest.mark.parametrize("method", METHODS)
def test_a_common_shift_costs_no_digits(method: str, generator: np.random.Generator) -> None:
    draws = generator.integers(0, 1 << 20, 499) / 1024.0
    near, far = (limits(method, 512.0 + by, (draws + by).tolist()) for by in (0.0, 2.0**30))
    assert (far.se[0], far.bias[0]) == (near.se[0], near.bias[0])
    assert np.array(ends(far)) - 2.0**30 == pytest.approx(ends(near), abs=1e-6)


def test_all_draws_on_one_side() -> None:
    """z0 stays finite, and a correction past all bounds ends at the outermost draw."""
    draws = [float(v) for v in range(99)]
    low, high = ends(limits("bca", 200.0, draws))
    assert 90.0 < low <= high == 98.0
    assert ends(limits("bca", 50.0, draws, accelerations=np.array([0.9])))[1] == 98.0


def test_studentized_leaves_out_draws_without_an_error() -> None:
    draws = [1.0, 2.0, 3.0, 4.0, 5.0]
    own = np.array([[1.0, 0.0, 1.0, 0.0, 1.0]])
    found = limits("studentized", 3.0, draws, draw_errors=own, confidence=0.5)
    assert ends(found) == (1.0, 5.0)
    own = np.array([[1.0, 0.0, 0.0, 0.0, 1.0]])
    assert all(math.isnan(v) for v in ends(limits("studentized", 3.0, draws, draw_errors=own)))


def test_acceleration() -> None:
    """−Σ d³ / …: for three values by hand; equal values give 0."""
    d = np.array([1.0, 1.0, -2.0])
    expected = (d**3).sum() / (6 * (d**2).sum() ** 1.5)
    assert acceleration(5.0 - d) == pytest.approx(expected, rel=1e-14)
    assert acceleration(1e9 - d) == pytest.approx(expected, rel=1e-14)
    assert acceleration([4.0] * 5) == acceleration([]) == 0.0
    assert acceleration([math.inf] * 5) == 0.0
    assert math.isnan(acceleration([1.0, math.inf]))
