"""Properties of the bisquare scale."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from midspread.udfs.compiling import dispatcher
from midspread.udfs.declaring import null_mask
from midspread.udfs.scale.bisquare_scale import bisquare_scale

samples = st.lists(st.integers(-300, 300).map(float), min_size=2, max_size=60) | st.lists(
    st.floats(-1e6, 1e6), min_size=2, max_size=60
)


def figure(values, c=9.0):
    return float(dispatcher(bisquare_scale)(np.sort(np.asarray(values, float)), float(c)))


def is_null(answer):
    return bool(null_mask(np.array([answer]))[0])


def by_formula(values, c):
    """The formula term by term with exactly rounded sums; None where it is undefined."""
    x = np.asarray(values, float)
    centre = np.median(x)
    mad = np.median(np.abs(x - centre))
    if mad == 0:
        return None
    u = (x - centre) / (c * mad)
    inside = np.abs(u) < 1
    above = math.fsum(((x - centre) ** 2 * (1 - u**2) ** 4)[inside])
    below = math.fsum(((1 - u**2) * (1 - 5 * u**2))[inside])
    # A denominator that is rounding only says nothing.
    return math.sqrt(x.size * above / below**2) if abs(below) > 1e-9 else None


@settings(deadline=None)
@given(samples, st.sampled_from([3.0, 6.0, 9.0, 30.0]))
def test_is_its_formula(values, c):
    expected = by_formula(values, c)
    found = figure(values, c)
    if expected is not None:
        assert found == pytest.approx(expected, rel=1e-6 if c < 6 else 1e-9)
    elif np.median(np.abs(np.array(values) - np.median(values))) == 0:
        assert is_null(found)


@pytest.mark.parametrize("size", [10, 1000, 100_000])
def test_is_its_formula_on_ordinary_data(generator, size):
    for sample in (generator.normal(100, 15, size), generator.gamma(2, 20, size)):
        assert figure(sample) == pytest.approx(by_formula(sample, 9.0), rel=1e-13)


@settings(deadline=None)
@given(
    values=st.lists(st.integers(-(2**20), 2**20), min_size=2, max_size=40),
    shift=st.sampled_from([0, 1_000_000_000, -3_000_000_000]),
    factor=st.sampled_from([1, 0.25, -1, -1024]),
)
def test_ignores_shift_and_follows_scale(values, shift, factor):
    # Values, shifts and factors that double holds exactly, the halves of the median included.
    values = np.array(values, float) / 64
    found = figure(values)
    changed = figure(values * factor + shift)
    assert is_null(changed) == is_null(found)
    if not is_null(found):
        assert changed == pytest.approx(found * abs(factor), rel=1e-12)


def test_far_values_count_by_their_number_only(generator):
    sample = generator.normal(30, 5, 101)
    assert figure([*sample, math.inf, -math.inf]) == figure([*sample, 1e9, -1e9])
    assert figure([*sample, math.inf]) > figure(sample)


def test_infinite_deviation():
    assert figure([-math.inf, 0, 1, math.inf]) == math.inf
    assert figure([1, 2, math.inf, math.inf]) == math.inf
    assert math.isnan(figure([-math.inf, math.inf]))


def test_null_where_no_deviation_and_where_nothing_is_within_reach():
    assert is_null(figure([5, 5, 5, 9]))
    assert is_null(figure([math.inf, math.inf, math.inf, 2]))
    assert is_null(figure([0, 10], c=0.5))
