"""The counts behind `bootstrap_expression`: exact totals, the right distribution, any order."""

import itertools
import math
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from midspread.udfs.resampling import multinomial
from midspread.udfs.resampling.multinomial_copies import _loop

Counts = npt.NDArray[np.int32]


def drawn(
    n: int, resamples: int, positions: Any = None, key: int = 7, seed: int = 0, first: int = 1
) -> Counts:
    """One line a resample, one column a position."""
    asked = np.arange(n) if positions is None else np.asarray(positions, dtype=np.int64)
    counts = np.full((resamples, asked.size), -1, dtype=np.int32)
    _loop(multinomial.count_rows)(
        np.full(asked.size, key, np.uint64),
        np.full(asked.size, n, np.int64),
        asked,
        np.full(asked.size, seed, np.uint64),
        first,
        counts,
        np.zeros(2, np.int64),
    )
    return counts


@pytest.mark.parametrize("n", [1, 2, 3, 63, 64, 65, 127, 128, 129, 1000, 4097, 100_003])
def test_totals_are_exact(n: int) -> None:
    counts = drawn(n, 50)
    assert (counts >= 0).all()
    assert (counts.sum(axis=1) == n).all()


@settings(deadline=None)
@given(st.integers(1, 3000), st.integers(0, 2**53), st.data())
def test_any_part_of_the_rows_gets_the_same_counts(n: int, seed: int, data: st.DataObject) -> None:
    asked = sorted(data.draw(st.lists(st.integers(0, n - 1), min_size=1, max_size=40)))
    whole = drawn(n, 5, seed=seed)
    assert (drawn(n, 5, asked, seed=seed) == whole[:, asked]).all()
    assert (drawn(n, 2, asked[::-1], seed=seed, first=4) == whole[3:, asked[::-1]]).all()


def test_every_outcome_is_as_likely_as_it_should_be() -> None:
    """Three rows: the ten outcomes of three draws, by chi-square (0.1 % level, 200,000 draws)."""
    found, times = np.unique(drawn(3, 200_000), axis=0, return_counts=True)
    expected = [6 / math.prod(math.factorial(k) for k in outcome) / 27 for outcome in found]
    assert len(found) == 10
    assert stats.chisquare(times, 200_000 * np.array(expected)).pvalue > 0.001


@pytest.mark.parametrize("n", [64, 65, 130, 1000])
def test_moments(n: int) -> None:
    """Mean 1, variance 1 − 1/n, covariance −1/n, for rows of one block and of several."""
    counts = drawn(n, 40_000).astype(float)
    mean, variance = counts.mean(axis=0), counts.var(axis=0)
    assert np.abs(mean - 1).max() < 4.5 / 200
    assert variance.mean() == pytest.approx(1 - 1 / n, abs=0.01)
    assert np.abs(variance - (1 - 1 / n)).max() < 4.5 * math.sqrt(3) / 200
    pairs = [(0, 1), (0, n - 1), (n // 2 - 1, n // 2), (63 % n, 64 % n)]
    for i, j in pairs:
        if i != j:
            assert np.cov(counts[:, i], counts[:, j])[0, 1] == pytest.approx(-1 / n, abs=0.025)


@pytest.mark.parametrize(("n", "rows"), [(130, 64), (1000, 512), (65, 64), (5000, 4096), (67, 3)])
def test_parts_are_binomial(n: int, rows: int) -> None:
    """The draws that fall into the first rows, by chi-square (0.1 % level)."""
    totals = drawn(n, 20_000, np.arange(rows), key=11).sum(axis=1)
    edges = np.unique(stats.binom.ppf([0.1, 0.25, 0.4, 0.5, 0.6, 0.75, 0.9], n, rows / n))
    edges = edges[edges < n]
    cells = np.searchsorted(edges, totals)
    mass = np.diff(np.concatenate(([0], stats.binom.cdf(edges, n, rows / n), [1])))
    times = np.bincount(cells, minlength=mass.size)
    assert stats.chisquare(times, 20_000 * mass).pvalue > 0.001


def test_resamples_keys_and_seeds_are_independent() -> None:
    """Correlations of 50,000 counts lie within 4.5 of their standard errors of 0."""
    n = 50_000
    lines = [drawn(n, 2)[0], drawn(n, 2)[1], drawn(n, 1, key=8)[0], drawn(n, 1, seed=1)[0]]
    for one, other in itertools.combinations(lines, 2):
        assert abs(np.corrcoef(one, other)[0, 1]) < 4.5 / math.sqrt(n)
