"""Properties of the half-sample mode."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from midspread.udfs.compiling import dispatcher
from midspread.udfs.location.half_sample_mode import half_sample_mode

whole = st.lists(st.integers(-30, 30).map(float), min_size=1, max_size=40)
real = st.lists(st.floats(-1e6, 1e6), min_size=1, max_size=60)


def mode(values):
    return float(dispatcher(half_sample_mode)(np.sort(np.asarray(values, float))))


def by_definition(values):
    """The published steps in plain Python with the documented rule for ties."""
    x = sorted(values)
    while len(x) > 2:
        half = math.ceil(len(x) / 2)
        widths = [high - low for low, high in zip(x, x[half - 1 :], strict=False)]
        tied = [i for i, width in enumerate(widths) if width == min(widths)]
        middle = (tied[(len(tied) - 1) // 2] + tied[len(tied) // 2]) / 2
        if len(x) == 3 and len(tied) == 2:
            return x[1]
        x = x[math.floor(middle) : math.ceil(middle) + half]
    return sum(x) / len(x)


@settings(deadline=None)
@given(whole)
def test_is_its_definition_with_ties(values):
    assert mode(values) == by_definition(values)


@pytest.mark.parametrize("size", [3, 4, 5, 10, 101, 1000])
def test_is_its_definition_without_ties(generator, size):
    for _ in range(20):
        sample = generator.lognormal(0, 1, size)
        assert mode(sample) == by_definition(sample)


@settings(deadline=None)
@given(whole | real)
def test_mirrors_exactly(values):
    assert mode([-v for v in values]) == -mode(values)


@settings(deadline=None)
@given(whole, st.sampled_from([0.1, 3.0, 1e-6, 1e6]), st.sampled_from([0.0, 7.3, 1e9]))
def test_ties_stay_ties_when_shifted_and_rescaled(values, factor, shift):
    if shift == 1e9 and factor < 1e-3:
        return  # the shift itself would round the values
    moved = [v * factor + shift for v in values]
    # The moved values are themselves rounded, each to half a unit of its last place; the answer
    # and what is expected once more. A tie taken for none would move it by half a factor.
    rounding = 2 * np.spacing(max(abs(v) for v in moved))
    assert rounding < factor / 4
    assert abs(mode(moved) - (mode(values) * factor + shift)) <= rounding


@settings(deadline=None)
@given(whole | real)
def test_lies_within_the_narrowest_half(values):
    x = np.sort(values)
    half = (len(x) + 1) // 2
    found = mode(values)
    widths = x[half - 1 :] - x[: len(x) - half + 1]
    narrowest = widths.min()
    starts = np.flatnonzero(widths == narrowest)
    if len(starts) == 1:
        assert x[starts[0]] <= found <= x[starts[0] + half - 1]
    assert x[0] <= found <= x[-1]


@pytest.mark.parametrize(
    ("values", "expected"),
    [
        ([5.0, 5.0, math.inf, math.inf, 4.0], 5.0),
        ([-math.inf, 1.0, 2.0, math.inf], 1.5),
        ([-math.inf, 1.0, 2.0, math.inf, math.inf], 1.5),
        ([math.inf] * 4, math.inf),
        ([-math.inf, math.inf], math.nan),
        ([math.inf, 3.0], math.inf),
    ],
)
def test_infinite_values(values, expected):
    assert mode(values) == pytest.approx(expected, nan_ok=True)


def test_far_values_do_no_harm(generator):
    sample = generator.normal(30, 5, 501)
    assert mode([*sample, 1e300, -math.inf, math.inf]) == mode([*sample, 1e5, -1e6, 1e6])


def test_a_million_values_of_which_every_half_ties():
    # Anything quadratic would not come back.
    assert mode(np.arange(1_000_001.0)) == 500_000
    assert mode(np.zeros(1_000_000)) == 0
