"""Properties of the M-estimates of location."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import optimize

from midspread.udfs.compiling import dispatcher
from midspread.udfs.declaring import null_mask
from midspread.udfs.location.m_estimates import bisquare_location, huber_location

whole = st.lists(st.integers(-30, 30).map(float), min_size=1, max_size=40)
real = st.lists(st.floats(-1e6, 1e6), min_size=1, max_size=60)
samples = whole | real
bends = st.floats(0.05, 20)


def figure(kernel, values, parameter):
    return float(dispatcher(kernel)(np.sort(np.asarray(values, float)), float(parameter)))


def median_and_scale(values):
    x = np.asarray(values, float)
    centre = float(np.median(x))
    return centre, float(np.median(np.abs(x - centre))) / 0.6744897501960817


@settings(deadline=None)
@given(samples, bends)
def test_huber_solves_its_equation(values, k):
    centre, scale = median_and_scale(values)
    found = figure(huber_location, values, k)
    if scale == 0:
        assert found == centre
        return
    distances = np.asarray(values) - centre

    def pull(offset):
        return math.fsum(np.clip((distances - offset) / scale, -k, k))

    here = found - centre
    # The pull falls as the centre rises, so a root lies within the tolerance on either side.
    room = 2e-12 * scale + 4e-16 * abs(centre)
    assert pull(here - room) >= -1e-12 * len(values) * k
    assert pull(here + room) <= 1e-12 * len(values) * k
    if k > 0.68:  # one root only
        root = optimize.brentq(pull, -k * scale, k * scale, xtol=1e-14 * scale, rtol=1e-15)
        assert found == pytest.approx(centre + root, abs=1e-10 * scale)


@pytest.mark.parametrize("size", [5, 50, 51, 5000])
@pytest.mark.parametrize("c", [2.0, 4.685, 9.0])
def test_bisquare_is_the_limit_of_reweighted_means(generator, size, c):
    for sample in (generator.normal(100, 15, size), generator.gamma(2, 20, size)):
        centre, scale = median_and_scale(sample)
        now = centre
        for _ in range(2000):
            u = (sample - now) / (c * scale)
            w = np.where(np.abs(u) < 1, (1 - u * u) ** 2, 0)
            step = math.fsum(w * (sample - now)) / math.fsum(w)
            now += step
            if abs(step) < 1e-14 * scale:
                break
        assert figure(bisquare_location, sample, c) == pytest.approx(now, abs=2e-11 * scale)


@pytest.mark.parametrize("kernel", [huber_location, bisquare_location])
@settings(deadline=None)
@given(
    values=st.lists(st.integers(-(2**20), 2**20), min_size=1, max_size=40),
    parameter=st.floats(1.0, 10),
    shift=st.sampled_from([0, 1_000_000_000, -3_000_000_000]),
    factor=st.sampled_from([1, 0.25, -1, -1024]),
)
def test_follows_shift_scale_and_reflection(kernel, values, parameter, shift, factor):
    # Values, shifts and factors that double holds exactly: only the result is rounded.
    values = np.array(values, float) / 64
    _, scale = median_and_scale(values)
    found = figure(kernel, values, parameter)
    changed = figure(kernel, values * factor + shift, parameter)
    assert changed == pytest.approx(
        found * factor + shift, abs=2e-7 * (shift != 0) + 1e-9 * abs(factor * scale)
    )


@pytest.mark.parametrize("kernel", [huber_location, bisquare_location])
def test_far_values_may_be_infinite(kernel, generator):
    sample = generator.normal(30, 5, 101)
    far = np.concatenate((sample, [1e9, 1e9, -1e9]))
    infinite = np.concatenate((sample, [math.inf, math.inf, -math.inf]))
    assert figure(kernel, infinite, 3.0) == figure(kernel, far, 3.0)


@pytest.mark.parametrize("kernel", [huber_location, bisquare_location])
@pytest.mark.parametrize(
    ("values", "expected"),
    [
        ([4.0], 4.0),
        ([4.0, 7.0], 5.5),
        ([3.0, 3.0, 3.0, 900.0], 3.0),
        ([1.0, math.inf, math.inf], math.inf),
        ([math.inf] * 4, math.inf),
        ([-math.inf, -math.inf, 5.0], -math.inf),
        ([-math.inf, math.inf], math.nan),
        ([-math.inf, 0.0, 1.0, math.inf], math.nan),
    ],
)
def test_few_equal_and_infinite_values(kernel, values, expected):
    assert figure(kernel, values, 4.0) == pytest.approx(expected, nan_ok=True)


def test_huber_goes_from_the_median_to_the_mean(generator):
    sample = generator.gamma(2, 20, 999)
    assert figure(huber_location, sample, 1e-9) == pytest.approx(np.median(sample), abs=1e-6)
    assert figure(huber_location, sample, 1e6) == pytest.approx(math.fsum(sample) / 999, rel=1e-14)
    assert figure(huber_location, sample, 1e308) == pytest.approx(sample.mean(), rel=1e-14)
    assert figure(bisquare_location, sample, 1e8) == pytest.approx(sample.mean(), rel=1e-13)


def test_huber_with_nothing_within_reach():
    # Below 0.6745 scales no value may be near the median; it solves the equation as it is.
    assert figure(huber_location, [0.0, 10.0], 0.1) == 5.0
    assert figure(huber_location, [0.0, 1.0, 9.0, 10.0], 0.2) == 5.0


def test_bisquare_with_nothing_within_reach_is_null():
    answer = dispatcher(bisquare_location)(np.array([0.0, 10.0]), 0.1)
    assert null_mask(np.array([answer]))[0]


@pytest.mark.parametrize("kernel", [huber_location, bisquare_location])
def test_uncompiled_kernel_agrees(kernel, generator):
    sample = np.sort(generator.gamma(2, 20, 200))
    assert figure(kernel, sample, 2.0) == pytest.approx(kernel(sample, 2.0), rel=1e-14)
