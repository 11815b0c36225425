"""Properties of the quantile estimators."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.special import betainc

from midspread.udfs.compiling import dispatcher
from midspread.udfs.location.quantiles import harrell_davis, quantile_hf

samples = st.lists(st.integers(-30, 30).map(float), min_size=1, max_size=40) | st.lists(
    st.floats(-1e6, 1e6), min_size=1, max_size=60
)
probs = st.sampled_from([0.0, 0.5, 1.0]) | st.floats(0, 1)
kinds = st.integers(1, 9)


def figure(kernel, values, *parameters):
    return float(dispatcher(kernel)(np.sort(np.asarray(values, float)), *map(float, parameters)))


def spread(values):
    return max(values) - min(values)


@settings(deadline=None)
@given(samples, st.floats(1e-6, 1 - 1e-6))
def test_harrell_davis_is_its_formula(values, prob):
    n = len(values)
    a, b = (n + 1) * prob, (n + 1) * (1 - prob)
    edges = np.arange(n + 1) / n
    below, above = betainc(a, b, edges), betainc(b, a, 1 - edges)
    weights = np.where(below[1:] < 0.5, np.diff(below), -np.diff(above))
    expected = math.fsum(weights * np.sort(values))
    assert figure(harrell_davis, values, prob) == pytest.approx(
        expected, abs=1e-12 * (spread(values) + max(map(abs, values)))
    )


@settings(deadline=None)
@given(samples, probs, probs)
def test_harrell_davis_rises_with_prob_within_the_values(values, one, other):
    low, high = (figure(harrell_davis, values, p) for p in sorted((one, other)))
    room = 1e-13 * (spread(values) + max(map(abs, values)))
    assert min(values) - room <= low <= high + room <= max(values) + 2 * room


@settings(deadline=None)
@given(samples, st.integers(0, 64).map(lambda i: i / 64))
def test_harrell_davis_mirrors(values, prob):
    mirrored = figure(harrell_davis, [-v for v in values], 1 - prob)
    assert figure(harrell_davis, values, prob) == pytest.approx(
        -mirrored, abs=1e-13 * (spread(values) + max(map(abs, values)))
    )


def test_harrell_davis_far_values_may_be_infinite(generator):
    sample = generator.normal(30, 5, 2000)
    wild = np.concatenate(([-math.inf] * 3, sample, [math.inf] * 3))
    far = np.concatenate(([-1e3] * 3, sample, [1e3] * 3))
    assert figure(harrell_davis, wild, 0.5) == pytest.approx(
        figure(harrell_davis, far, 0.5), rel=1e-14
    )


@pytest.mark.parametrize(
    ("values", "prob", "expected"),
    [
        ([4.0], 0.3, 4.0),
        ([1.0, math.inf], 0.5, math.inf),
        ([-math.inf, 1.0, 2.0], 0.5, -math.inf),
        ([-math.inf, 1.0, math.inf], 0.5, math.nan),
        ([-math.inf, 1.0, math.inf], 0.0, -math.inf),
        ([-math.inf, 1.0, math.inf], 1.0, math.inf),
        ([math.inf] * 5, 0.5, math.inf),
        ([1.0, 2.0, 3.0], 1e-300, 1.0),
        ([1.0, 2.0, 3.0], 5e-324, 1.0),
    ],
)
def test_harrell_davis_few_and_infinite_values(values, prob, expected):
    assert figure(harrell_davis, values, prob) == pytest.approx(expected, nan_ok=True)


@pytest.mark.parametrize("prob", [0.05, 0.5, 0.9])
def test_digits_hold_under_a_large_shift(generator, prob):
    sample = np.round(generator.gamma(2, 20, 3000) * 64) / 64
    shifted = figure(harrell_davis, sample + 1e9, prob)
    assert shifted - 1e9 == pytest.approx(figure(harrell_davis, sample, prob), abs=1.3e-7)
    for kind in range(1, 10):
        shifted = figure(quantile_hf, sample + 1e9, prob, kind)
        assert shifted - 1e9 == pytest.approx(figure(quantile_hf, sample, prob, kind), abs=1.3e-7)


def by_definition(values, prob, kind):
    """Hyndman & Fan 1996 in their own terms: j, g and gamma."""
    x = np.sort(values)
    n = len(x)
    if kind <= 3:
        m = -0.5 if kind == 3 else 0.0
    else:
        m = [0, 0.5, prob, 1 - prob, (prob + 1) / 3, prob / 4 + 3 / 8][kind - 4]
    j = math.floor(n * prob + m + (0 if kind <= 3 else 4 * 2.0**-52))
    g = n * prob + m - j
    if kind > 3 and abs(g) < 1e-12:
        g = 0.0
    if kind == 1:
        gamma = float(g > 0)
    elif kind == 2:
        gamma = 1.0 if g > 0 else 0.5
    elif kind == 3:
        gamma = 0.0 if g == 0 and j % 2 == 0 else 1.0
    else:
        gamma = g
    low, high = x[min(max(j, 1), n) - 1], x[min(max(j + 1, 1), n) - 1]
    return low + gamma * (high - low)


@settings(deadline=None)
@given(samples, probs, kinds)
def test_quantile_is_its_definition(values, prob, kind):
    assert figure(quantile_hf, values, prob, kind) == pytest.approx(
        by_definition(values, prob, kind), abs=1e-12 * (spread(values) + max(map(abs, values)))
    )


@settings(deadline=None)
@given(samples, probs, kinds)
def test_quantile_stays_within_and_rises(values, prob, kind):
    found = figure(quantile_hf, values, prob, kind)
    assert min(values) <= found <= max(values)
    assert figure(quantile_hf, values, min(1.0, prob + 0.1), kind) >= found - 1e-13 * abs(found)
    assert figure(quantile_hf, values, 0, kind) == min(values)
    assert figure(quantile_hf, values, 1, kind) == max(values)


@pytest.mark.parametrize("kind", range(1, 10))
def test_quantile_infinite_values(kind):
    values = [-math.inf, 1.0, 2.0, 3.0, 4.0, 5.0, 6.0, math.inf]
    assert figure(quantile_hf, values, 0.0, kind) == -math.inf
    assert figure(quantile_hf, values, 1.0, kind) == math.inf
    assert 2 < figure(quantile_hf, values, 0.5, kind) < 5
    assert figure(quantile_hf, [math.inf] * 3, 0.4, kind) == math.inf
    if kind > 3:  # all of them between −inf and 5, which is −inf
        assert figure(quantile_hf, [-math.inf, 5.0, 6.0, 7.0], 0.3, kind) == -math.inf


def test_no_two_kinds_are_the_same():
    curves = {
        tuple(figure(quantile_hf, [0.0, 1.0, 5.0, 14.0], p / 20, kind) for p in range(21))
        for kind in range(1, 10)
    }
    assert len(curves) == 9
