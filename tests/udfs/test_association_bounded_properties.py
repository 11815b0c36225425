"""Properties of the correlations that bound or down-weight wild values."""

import math
from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from midspread.udfs.association.bounded_correlations import (
    bisquare_corr,
    percentage_bend_corr,
    winsorized_corr,
)
from midspread.udfs.declaring import null_mask
from tests.conftest import Estimate

Pairs = list[tuple[float, float]]
REPRODUCIBLE = settings(max_examples=100, deadline=None, derandomize=True)
EIGHTHS = st.integers(-4000, 4000).map(lambda i: i / 8)
PAIRS = st.lists(st.tuples(EIGHTHS, EIGHTHS), min_size=2, max_size=30)
KERNELS = {
    "winsorized_corr": lambda y, x: winsorized_corr(y, x, 0.2),
    "percentage_bend_corr": lambda y, x: percentage_bend_corr(y, x, 0.2),
    "bisquare_corr": bisquare_corr,
}
each_kernel = pytest.mark.parametrize("kernel", KERNELS.values(), ids=KERNELS)


def figure(kernel: Callable[..., float], pairs: Pairs) -> float | None:
    y, x = np.array(sorted(pairs)).T.copy()
    number = kernel(y, x)
    return None if null_mask(np.array([number]))[0] else number


def near(a: float | None, b: float | None) -> bool:
    return a is b if a is None or b is None else a == pytest.approx(b, rel=1e-9, abs=1e-11)


@each_kernel
@REPRODUCIBLE
@given(pairs=PAIRS)
def test_bounded_and_symmetric(kernel: Callable[..., float], pairs: Pairs) -> None:
    found = figure(kernel, pairs)
    assert found is None or -1.0 <= found <= 1.0
    assert near(figure(kernel, [(x, y) for y, x in pairs]), found)
    assert near(figure(kernel, [(-y, x) for y, x in pairs]), None if found is None else -found)


@each_kernel
@REPRODUCIBLE
@given(pairs=PAIRS, shift=st.sampled_from([0.0, 1e9, -(2.0**40)]), power=st.integers(-300, 300))
def test_units_and_origins_do_not_show(
    kernel: Callable[..., float], pairs: Pairs, shift: float, power: int
) -> None:
    found = figure(kernel, pairs)
    assert near(figure(kernel, [(y + shift, x) for y, x in pairs]), found)
    assert near(figure(kernel, [(y, x * 2.0**power) for y, x in pairs]), found)


@each_kernel
@REPRODUCIBLE
@given(values=st.lists(EIGHTHS, min_size=2, max_size=30))
def test_a_column_with_itself(kernel: Callable[..., float], values: list[float]) -> None:
    assert figure(kernel, [(v, v) for v in values]) in (None, 1.0)


def test_wild_values_do_no_harm(estimate: Estimate, generator: np.random.Generator) -> None:
    """A tenth of a column infinite, huge or merely large."""
    x = generator.normal(size=200)
    y = 0.8 * x + 0.6 * generator.normal(size=200)
    for name in KERNELS:
        clean = estimate(name, y, x)
        figures = []
        for wild in (1e4, 1e300, math.inf):
            spoilt = y.copy()
            spoilt[:10], spoilt[10:20] = wild, -wild
            figures.append(estimate(name, spoilt, x))
        assert figures[0] == pytest.approx(clean, abs=0.25)
        assert figures[1:] == pytest.approx([figures[0]] * 2, rel=1e-12)


def test_nothing_that_varies_gives_null(estimate: Estimate) -> None:
    for name in KERNELS:
        assert estimate(name, [1.0, 2.0, 3.0, 4.0], [5.0] * 4) is None
        assert estimate(name, [2.0] * 9 + [7.0], np.arange(10.0)) is None


def test_infinite_where_it_counts_gives_nan(estimate: Estimate) -> None:
    mostly = [math.inf, -math.inf] * 3 + [1.0, 2.0, 3.0, 4.0]
    for name in KERNELS:
        assert math.isnan(estimate(name, mostly, np.arange(10.0)))


def test_without_winsorizing_it_is_pearsons(
    estimate: Estimate, generator: np.random.Generator
) -> None:
    y, x = generator.normal(size=(2, 100)) + 1e6
    expected = np.corrcoef(y, x)[0, 1]
    assert estimate("winsorized_corr", y, x, share=0.0) == pytest.approx(expected, rel=1e-9)
