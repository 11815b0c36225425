"""Properties of the L-moments."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from midspread.udfs.compiling import dispatcher
from midspread.udfs.declaring import NULL, null_mask
from midspread.udfs.shape.l_moments import l_moments

whole = st.lists(st.integers(-30, 30).map(float), min_size=1, max_size=40)
real = st.lists(st.floats(-1e6, 1e6), min_size=1, max_size=60)


def figures(values):
    out = np.full(4, NULL)
    dispatcher(l_moments)(np.sort(np.asarray(values, float)), out)
    return out


def by_weighted_moments(values):
    """Through the probability-weighted moments of Landwehr, Matalas & Wallis 1979, exact sums."""
    x = np.sort(values)
    n = len(x)
    i = np.arange(n)
    weight = np.ones(n)
    moments = []
    for r in range(4):
        moments.append(math.fsum(weight * x) / n)
        if n - 1 - r > 0:
            weight = weight * (i - r) / (n - 1 - r)
    b0, b1, b2, b3 = moments
    return b0, 2 * b1 - b0, 6 * b2 - 6 * b1 + b0, 20 * b3 - 30 * b2 + 12 * b1 - b0


@settings(deadline=None)
@given(whole | real)
def test_agrees_with_probability_weighted_moments(values):
    n = len(values)
    l1, l2, l3, l4 = by_weighted_moments(values)
    found = figures(values)
    room = 1e-12 * (max(map(abs, values)) + 1e-300)
    assert found[0] == pytest.approx(l1, abs=room)
    assert null_mask(found).tolist()[:2] == [False, n < 2]
    if n >= 2:
        assert found[1] == pytest.approx(l2, abs=room)
    if n >= 3 and found[1] > 0:
        assert found[2] * found[1] == pytest.approx(l3, abs=room * 10)
    if n >= 4 and found[1] > 0:
        assert found[3] * found[1] == pytest.approx(l4, abs=room * 10)


@settings(deadline=None)
@given(whole | real)
def test_bounds(values):
    _, l2, t3, t4 = figures(values)
    if len(values) >= 4 and l2 > 0:
        # Hosking 1990, theorem 2; the unbiased sample ratios can leave the range of t4 below
        assert -1 - 1e-12 <= t3 <= 1 + 1e-12
        assert t4 <= 1 + 1e-12


@settings(deadline=None)
@given(st.lists(st.integers(-(2**20), 2**20), min_size=4, max_size=60))
def test_shift_and_reflection(values):
    values = np.array(values, float) / 64
    l1, *others = figures(values)
    assert figures(values + 1e9)[0] - 1e9 == pytest.approx(l1, abs=1.3e-7)
    assert figures(values + 1e9)[1:] == pytest.approx(others, rel=1e-13, abs=1e-13, nan_ok=True)
    assert figures(-values) == pytest.approx(
        [-l1, others[0], -others[1], others[2]], rel=1e-13, abs=1e-13, nan_ok=True
    )


def test_digits_on_many_values(generator):
    sample = generator.exponential(1, 1_000_000)
    l1, l2, l3, l4 = by_weighted_moments(sample)
    found = figures(sample)
    assert found == pytest.approx([l1, l2, l3 / l2, l4 / l2], rel=1e-12)
    assert figures(sample + 2.0**30)[1:] == pytest.approx(found[1:], rel=1e-7)


@pytest.mark.parametrize(
    ("values", "nulls"),
    [
        ([5.0], [False, True, True, True]),
        ([5.0, 7.0], [False, False, True, True]),
        ([5.0, 7.0, 8.0], [False, False, False, True]),
        ([5.0, 5.0, 5.0, 5.0, 5.0], [False, False, True, True]),
        ([1.0, math.inf], [False, False, True, True]),
    ],
)
def test_few_and_equal_values(values, nulls):
    assert null_mask(figures(values)).tolist() == nulls


def test_infinite_values():
    assert figures([1.0, 2.0, 3.0, 4.0, math.inf]).tolist()[:2] == [math.inf, math.inf]
    assert figures([-math.inf, 1.0, 2.0]).tolist()[:2] == [-math.inf, math.inf]
    both = figures([-math.inf, 1.0, 2.0, 3.0, math.inf])
    assert math.isnan(both[0])
    assert both[1] == math.inf
    assert np.isnan(both[2:]).all()
    assert not null_mask(both).any()
