"""Statistics from counts equal those of the resample written out; draws are what they should be."""

import math

import numpy as np
import pytest
import scipy.stats
from hypothesis import given, settings
from hypothesis import strategies as st

from midspread.udfs.location.quantiles import quantile_hf
from midspread.udfs.location.trimming import trimmed_mean, winsorized_mean
from midspread.udfs.resampling.counted import (
    QUANTILE,
    TRIMMED,
    WINSORIZED,
    Small,
    counted_value,
    rows_between_marks,
    set_marks,
    written_out,
)
from midspread.udfs.resampling.counted_drawing import draw_blocks, draw_units, leave_out
from midspread.udfs.resampling.randomness import stream

KERNELS = {TRIMMED: trimmed_mean, WINSORIZED: winsorized_mean}
VALUES = st.one_of(
    st.integers(-4, 4).map(float),
    st.floats(-1e6, 1e6, allow_nan=False),
    st.sampled_from([1e9 + 0.1, 1e9 + 0.3, -1e200, 1e200]),
)


def one_value(
    x: np.ndarray,
    unit: Small,
    counts: Small,
    form: int,
    p: tuple[float, float],
    step: int,  # type: ignore[type-arg]
) -> float:
    marks = x.size // step + 1 if step else 0
    below = np.zeros((marks, counts.size), dtype=np.int64)
    sums = np.zeros((marks, counts.size))
    origin = float(x[x.size // 2])
    if step:
        set_marks(x, unit, origin, step, below, sums)
    total = int(counts[unit].sum())
    return counted_value(x, unit, counts, total, form, np.array(p), origin, step, below, sums)


@given(
    rows=st.lists(st.tuples(VALUES, st.integers(0, 4)), min_size=1, max_size=40),
    counts=st.lists(st.integers(0, 3), min_size=5, max_size=5),
    form=st.sampled_from([TRIMMED, WINSORIZED, QUANTILE]),
    share=st.sampled_from([0.0, 0.1, 0.2, 0.25, 0.49, 0.5]),
    kind=st.integers(1, 9),
    step=st.sampled_from([0, 1, 2, 3, 7, 50]),
)
@settings(max_examples=400, deadline=None)
def test_counted_as_written_out(
    rows: list[tuple[float, int]],
    counts: list[int],
    form: int,
    share: float,
    kind: int,
    step: int,
) -> None:
    rows.sort()
    x = np.array([row[0] for row in rows]) + 0.0
    unit = np.array([row[1] for row in rows], dtype=np.int32)
    drawn = np.array(counts, dtype=np.int32)
    total = int(drawn[unit].sum())
    if total == 0:
        return
    resample = written_out(x, unit, drawn, total)
    assert resample.tolist() == sorted(np.repeat(x, drawn[unit]).tolist())
    if form == QUANTILE:
        expected = quantile_hf(resample, 2 * share, float(kind))
        assert one_value(x, unit, drawn, form, (2 * share, float(kind)), step) == expected
        return
    expected = KERNELS[form](resample, share)
    found = one_value(x, unit, drawn, form, (share, 0.0), step)
    g = int(share * total)
    kept = resample[g : total - g] if 2 * g < total else resample
    scale = float(np.abs(kept - x[x.size // 2]).max()) + abs(expected)
    assert found == pytest.approx(expected, rel=1e-13, abs=4e-15 * scale)
    assert kept[0] <= found <= kept[-1]


def test_wild_tails_spoil_no_sum_that_leaves_them_out() -> None:
    """With marks: the sums between them run from the middle outwards."""
    generator = np.random.default_rng(2)
    n, units = 4096, 4
    x = np.sort(generator.normal(0.0, 1.0, n))
    x[:200] *= 1e280
    x[-200:] *= 1e280
    x.sort()
    unit = generator.integers(0, units, n).astype(np.int32)
    step = rows_between_marks(n, units)
    assert step > 0
    counts = np.array([2, 0, 1, 1], dtype=np.int32)
    expected = trimmed_mean(written_out(x, unit, counts, int(counts[unit].sum())), 0.2)
    found = one_value(x, unit, counts, TRIMMED, (0.2, 0.0), step)
    assert found == pytest.approx(expected, abs=1e-14)


def test_a_shift_keeps_the_digits() -> None:
    generator = np.random.default_rng(3)
    x = np.sort(np.round(generator.normal(0.0, 1.0, 2000), 3) * 1024) / 1024
    unit = generator.integers(0, 4, x.size).astype(np.int32)
    counts = np.array([1, 3, 0, 1], dtype=np.int32)
    for step in (0, 128):
        plain = one_value(x, unit, counts, TRIMMED, (0.1, 0.0), step)
        shifted = one_value(x + 2.0**30, unit, counts, TRIMMED, (0.1, 0.0), step)
        assert shifted - 2.0**30 == pytest.approx(plain, abs=2.0**-22)


def keys(count: int) -> list[np.uint64]:
    with np.errstate(over="ignore"):
        return [stream(np.uint64(77), i) for i in range(count)]


def test_units_are_drawn_uniformly() -> None:
    sizes = np.array([3, 1, 4, 1, 5])
    seen = np.zeros(5)
    for key in keys(3000):
        counts = np.zeros(5, dtype=np.int32)
        with np.errstate(over="ignore"):
            total = draw_units(key, sizes, counts)
        assert counts.sum() == 5
        assert total == (counts * sizes).sum()
        seen += counts
    assert scipy.stats.chisquare(seen).pvalue > 0.001


@pytest.mark.parametrize(("n", "block"), [(10, 3), (10, 5), (7, 1), (9, 4)])
def test_blocks_are_a_circle(n: int, block: int) -> None:
    """Every position equally often; runs of the drawn positions are blocks that may wrap."""
    seen = np.zeros(n)
    starts = set()
    for key in keys(3000):
        counts = np.zeros(n, dtype=np.int32)
        with np.errstate(over="ignore"):
            assert draw_blocks(key, block, counts) == n
        assert counts.sum() == n and counts.min() >= 0
        assert counts.max() <= math.ceil(n / block)
        seen += counts
        starts.update(np.flatnonzero(np.roll(counts, 1) < counts).tolist())
    assert starts == set(range(n))
    spread = seen / seen.sum() - 1 / n
    assert np.abs(spread).max() < 5 * math.sqrt(block / n / (3000 * n))


def test_parts_left_out_cover_every_unit_once() -> None:
    sizes = np.arange(1, 8)
    left = np.zeros(7)
    for part in range(3):
        counts = np.zeros(7, dtype=np.int32)
        assert leave_out(part, 3, sizes, counts) == (counts * sizes).sum()
        left += 1 - counts
    assert left.tolist() == [1.0] * 7
