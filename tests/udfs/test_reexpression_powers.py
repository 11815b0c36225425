"""Estimated powers: what a change of unit, sign or exponent does to them."""

import math
from typing import Any

import numpy as np
import pytest
import scipy.stats
from hypothesis import given, settings
from hypothesis import strategies as st

from tests.conftest import Estimate

REPRODUCIBLE = settings(max_examples=60, deadline=None, derandomize=True)
POSITIVE = st.lists(st.integers(1, 4000).map(lambda i: i / 8), min_size=3, max_size=40).filter(
    lambda x: len(set(x)) > 2
)
DROP = scipy.stats.chi2.ppf(0.95, 1) / 2


def figures(record: dict[str, float]) -> list[float]:
    return [record["power"], record["lower"], record["upper"]]


@REPRODUCIBLE
@given(x=POSITIVE, factor=st.sampled_from([1 / 60, 1e-9, 3.0, 1e12]))
def test_box_cox_power_has_no_unit(estimate: Estimate, x: list[float], factor: float) -> None:
    first, second = (estimate("box_cox_power", v) for v in (x, [v * factor for v in x]))
    assert figures(second) == pytest.approx(figures(first), rel=1e-8, abs=1e-8)
    expected = first["log_likelihood"] - len(x) * math.log(factor)
    assert second["log_likelihood"] == pytest.approx(expected, rel=1e-10, abs=1e-8)


@REPRODUCIBLE
@given(x=POSITIVE, exponent=st.sampled_from([2.0, 0.5, -1.0]))
def test_powers_of_powers(estimate: Estimate, x: list[float], exponent: float) -> None:
    """box_cox(x^a, λ) is box_cox(x, aλ) but for origin and unit, so the power is divided by a."""
    first, second = (estimate("box_cox_power", v) for v in (x, [v**exponent for v in x]))
    expected = sorted([first["lower"] / exponent, first["upper"] / exponent])
    assert second["power"] == pytest.approx(first["power"] / exponent, rel=1e-7, abs=1e-7)
    assert [second["lower"], second["upper"]] == pytest.approx(expected, rel=1e-7, abs=1e-7)


@REPRODUCIBLE
@given(x=st.lists(st.integers(-800, 800).map(lambda i: i / 8), min_size=3, max_size=40))
def test_yeo_johnson_power_mirrors(estimate: Estimate, x: list[float]) -> None:
    first, second = (estimate("yeo_johnson_power", v) for v in (x, [-v for v in x]))
    if len(set(x)) == 1:
        assert set(first.values()) == set(second.values()) == {None}
        return
    expected = [2 - first["power"], 2 - first["upper"], 2 - first["lower"]]
    assert figures(second) == pytest.approx(expected, rel=1e-8, abs=1e-8)
    assert second["log_likelihood"] == pytest.approx(first["log_likelihood"], rel=1e-10, abs=1e-9)


@REPRODUCIBLE
@given(x=POSITIVE)
def test_it_is_the_maximum_and_the_limits_are_limits(estimate: Estimate, x: list[float]) -> None:
    for name, likelihood, values in (
        ("box_cox_power", scipy.stats.boxcox_llf, np.array(x)),
        ("yeo_johnson_power", scipy.stats.yeojohnson_llf, np.array(x) - np.median(x)),
    ):
        found = estimate(name, values)
        at = {key: likelihood(found[key], values) for key in ("power", "lower", "upper")}
        assert found["lower"] < found["power"] < found["upper"]
        assert at["power"] == pytest.approx(found["log_likelihood"], rel=1e-8, abs=1e-8)
        for limit in ("lower", "upper"):
            assert at["power"] - at[limit] == pytest.approx(DROP, rel=1e-5)
        step = (found["upper"] - found["lower"]) / 100
        for other in (found["power"] - step, found["power"] + step):
            assert likelihood(other, values) < at["power"]


def test_digits_hold_far_from_zero(estimate: Estimate, generator: np.random.Generator) -> None:
    """At 1e9 only the curvature that is left counts: near there ln x is a parabola, so λ grows.

    Reference: the same likelihood in numbers of 60 digits.
    """
    mpmath = pytest.importorskip("mpmath")
    x = 1e9 + np.round(generator.gamma(2.0, 5.0, 60) * 8) / 8
    found = estimate("box_cox_power", x)
    with mpmath.workdps(60):
        values = [mpmath.mpf(v) for v in x.tolist()]

        def likelihood(power: float) -> Any:
            p = mpmath.mpf(power)
            made = [(v / values[0]) ** p / p for v in values]
            mean = sum(made) / len(made)
            spread = sum((v - mean) ** 2 for v in made) / len(made)
            logs = sum(mpmath.log(v) for v in values) - len(values) * mpmath.log(values[0])
            return p * logs - len(values) * mpmath.log(spread) / 2

        top = likelihood(found["power"])
        width = found["upper"] - found["lower"]
        slope = (likelihood(found["power"] + width / 1e6) - top) - (
            likelihood(found["power"] - width / 1e6) - top
        )
        assert abs(slope) < 1e-12
        assert float(top - likelihood(found["lower"])) == pytest.approx(DROP, rel=1e-7)
        assert float(top - likelihood(found["upper"])) == pytest.approx(DROP, rel=1e-7)


def test_where_there_is_no_power(estimate: Estimate) -> None:
    for x in ([5.0] * 9, [0.0, 1.0, 2.0], [-1.0, 4.0, 9.0]):
        assert set(estimate("box_cox_power", x).values()) == {None}
    assert set(estimate("yeo_johnson_power", [5.0] * 9).values()) == {None}
    assert estimate("box_cox_power", [5.0]) is None
    for name in ("box_cox_power", "yeo_johnson_power"):
        assert all(math.isnan(v) for v in estimate(name, [1.0, 2.0, math.inf]).values())
    for x in ([5.0] * 9, [-3.0, -1.0, 0.0, 1.0, 2.0], [-5.0, -4.0, -1.0], [1.0, 2.0]):
        assert estimate("symmetry_power", x) is None
    assert math.isnan(estimate("symmetry_power", [1.0, math.inf, math.inf, math.inf]))


@REPRODUCIBLE
@given(x=POSITIVE, factor=st.sampled_from([1 / 60, 2.0**-300, 3.0, 1e200]))
def test_symmetry_power_has_no_unit(estimate: Estimate, x: list[float], factor: float) -> None:
    first, second = (estimate("symmetry_power", v) for v in (x, [v * factor for v in x]))
    assert second == pytest.approx(first, rel=1e-9, abs=1e-9)


@REPRODUCIBLE
@given(x=st.lists(st.integers(0, 400), min_size=3, max_size=30))
def test_symmetric_values_need_no_power(estimate: Estimate, x: list[int]) -> None:
    mirrored = [500.0 - v for v in x] + [500.0 + v for v in x]
    found = estimate("symmetry_power", mirrored)
    assert found in (1.0, None)
    assert (found is None) <= (np.median(np.abs(np.array(mirrored) - 500.0)) == 0.0 or len(x) < 64)


def test_wild_values_move_the_likelihood_and_not_the_letter_values(
    estimate: Estimate, generator: np.random.Generator
) -> None:
    clean = generator.lognormal(3.0, 0.3, 5000)
    spoilt = clean.copy()
    spoilt[:50] = 5000.0
    moved = [estimate("box_cox_power", v)["power"] for v in (clean, spoilt)]
    stayed = [estimate("symmetry_power", v) for v in (clean, spoilt)]
    assert abs(moved[1] - moved[0]) > 0.5
    assert abs(stayed[1] - stayed[0]) < 0.25
