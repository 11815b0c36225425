"""Ratios of pairs, counted and ordered without forming them, against the pairs formed."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from midspread.udfs.arithmetic.pair_tables import count_up_to_ratio
from midspread.udfs.compiling import dispatcher
from midspread.udfs.shape.medcouple import medcouple

REPRODUCIBLE = settings(max_examples=300, deadline=None, derandomize=True)
DISTANCES = st.lists(st.integers(1, 12).map(float), min_size=1, max_size=25).map(sorted)


@REPRODUCIBLE
@given(a=DISTANCES, b=DISTANCES, part=st.integers(-1, 13), whole=st.integers(1, 12))
def test_counts_up_to_a_ratio(a: list[float], b: list[float], part: int, whole: int) -> None:
    """Bounds below, among and above all ratios; many ratios are equal to one another."""
    rows, columns, bound = np.array(a), np.array(b), part / whole
    table = columns[np.newaxis, :] / rows[:, np.newaxis]
    ends = np.full(rows.size, -1, dtype=np.int32)
    assert count_up_to_ratio(rows, columns, bound, ends) == (table <= bound).sum()
    assert ends.tolist() == (table <= bound).sum(axis=1).tolist()


SHAPES = {
    "skewed": lambda chance, n: chance.lognormal(0.0, 1.0, n),
    "long-tailed": lambda chance, n: chance.standard_cauchy(n),
    "far from zero": lambda chance, n: 1e9 + chance.exponential(1.0, n),
    "few values": lambda chance, n: (
        np.floor(chance.exponential(8.0, n)) + 0.25 * (np.arange(n) % 2)
    ),
}


@pytest.mark.parametrize("n", [1200, 1777, 2500])
@pytest.mark.parametrize("shape", SHAPES)
def test_medcouple_of_a_large_group(shape: str, n: int) -> None:
    """Groups large enough for the search to begin with a thinned table."""
    x = np.sort(SHAPES[shape](np.random.default_rng(n), n))
    middle = np.median(x)
    assert (x < middle).sum() >= 512 and (x > middle).sum() >= 512
    up, down = x[x > middle] - middle, middle - x[x < middle]
    ties = n - up.size - down.size
    kernels = [((up[:, None] - down) / (up[:, None] + down)).ravel()]
    kernels.append(np.ones(ties * up.size + ties * (ties - 1) // 2))
    kernels += [np.zeros(ties), -np.ones(ties * down.size + ties * (ties - 1) // 2)]
    expected = np.median(np.concatenate(kernels))
    assert dispatcher(medcouple)(x) == pytest.approx(expected, rel=1e-12, abs=1e-14)
