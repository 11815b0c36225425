"""Properties of the robust lines, against the slopes of all pairs."""

import math
from collections.abc import Callable

import duckdb
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from midspread.udfs.arithmetic import repeated_selection, slope_selection
from midspread.udfs.association.repeated_median import repeated_median
from midspread.udfs.association.theil_sen import theil_sen
from tests.conftest import Estimate

Pairs = list[tuple[float, float]]
REPRODUCIBLE = settings(max_examples=60, deadline=None, derandomize=True)
WHOLE = st.integers(-4, 4).map(float)
TENTHS = st.integers(-50, 50).map(lambda i: i / 10)
WIDE = st.floats(-1e6, 1e6).map(lambda v: 0.0 if abs(v) < 1e-100 else v)
PAIRS = st.one_of(
    st.lists(st.tuples(values, places), min_size=2, max_size=40)
    for values in (WHOLE, TENTHS, WIDE)
    for places in (WHOLE, TENTHS, WIDE)
)
NO_STOP = np.zeros(2, np.int64)


@pytest.fixture(params=["as it is", "no short cuts"])
def _searching(request: pytest.FixtureRequest, monkeypatch: pytest.MonkeyPatch) -> None:
    """Also with the limits so low that small groups are searched as large ones are."""
    if request.param == "no short cuts":
        monkeypatch.setattr(slope_selection, "_ALL_PAIRS_UP_TO", 3)
        monkeypatch.setattr(slope_selection, "_ROOM", 1)
        monkeypatch.setattr(repeated_selection, "_ONE_BY_ONE", 2)
        monkeypatch.setattr(repeated_selection, "_FIRST_LOOK", 3)
        monkeypatch.setattr(repeated_selection, "_FIRST_MARGIN", 1)


def fitted(kernel: Callable[..., None], pairs: Pairs, *parameters: float) -> list[float | None]:
    """What a kernel answers, uncompiled."""
    y, x = np.array(sorted(pairs)).T.copy()
    out = np.full(4, math.nan)
    kernel(y, x, *parameters, out, NO_STOP)
    return [None if math.isnan(v) else float(v) for v in out]


def slopes_of(pairs: Pairs) -> np.ndarray:
    """The slope of each pair of points; NaN where both have the same x."""
    y, x = np.array(pairs).T
    rise, run = y - y[:, None], x - x[:, None]
    return np.where(run == 0, math.nan, rise / np.where(run == 0, 1.0, run))


@pytest.mark.usefixtures("_searching")
@REPRODUCIBLE
@given(pairs=PAIRS)
def test_theil_sen_as_over_all_pairs(pairs: Pairs) -> None:
    slopes = slopes_of(pairs)[np.triu_indices(len(pairs), 1)]
    slopes = np.sort(slopes[~np.isnan(slopes)])
    slope, intercept, lower, upper = fitted(theil_sen, pairs, 0.6)
    if not slopes.size:
        assert (slope, intercept, lower, upper) == (None, None, None, None)
        return
    assert slope == pytest.approx(np.median(slopes), rel=1e-14, abs=1e-300)
    y, x = np.array(pairs).T
    assert intercept == pytest.approx(np.median(y - slope * x), rel=1e-12, abs=1e-9)
    if lower is not None:
        rank = np.searchsorted(slopes, lower * (1 - math.copysign(1e-13, lower)))
        assert slopes[rank] == pytest.approx(lower, rel=1e-13)
        mirrored = np.searchsorted(slopes, upper * (1 + math.copysign(1e-13, upper)), "right") - 1
        assert slopes[mirrored] == pytest.approx(upper, rel=1e-13)
        assert lower <= slope <= upper


@pytest.mark.usefixtures("_searching")
@REPRODUCIBLE
@given(pairs=PAIRS)
def test_repeated_median_as_over_all_pairs(pairs: Pairs) -> None:
    slopes = slopes_of(pairs)
    slope, intercept, _, _ = fitted(lambda y, x, out, c: repeated_median(y, x, out, c), pairs)
    if np.isnan(slopes).all():
        assert slope is None and intercept is None
        return
    expected = np.median(np.nanmedian(slopes, axis=1))
    scale = np.nanmax(np.abs(slopes))
    assert slope == pytest.approx(expected, rel=1e-14, abs=1e-15 * scale)


class StopAfter(np.ndarray):
    """Cells of a control that ask to stop once they have been looked at so many times."""

    looks = 0

    def __getitem__(self, place: object) -> object:
        self.looks -= 1
        return 0 if self.looks > 0 else 1


@pytest.mark.usefixtures("_searching")
@pytest.mark.parametrize("looks", [1, 2, 3, 5, 8, 13, 21, 34, 55, 89])
def test_a_stop_ends_the_search_wherever_it_is(looks: int) -> None:
    y, x = drawn("continuous", 300)
    order = np.lexsort((x, y))
    for kernel, settings_given in ((theil_sen, (0.95,)), (repeated_median, ())):
        control = np.zeros(2, np.int64).view(StopAfter)
        control.looks = looks
        kernel(y[order], x[order], *settings_given, np.full(4, math.nan), control)
        assert control.looks <= 0 or kernel is repeated_median


def drawn(kind: str, n: int) -> tuple[np.ndarray, np.ndarray]:
    generator = np.random.default_rng(n)
    if kind == "continuous":
        x = generator.normal(size=n)
        return 2 * x + generator.standard_t(2, n), x
    if kind == "tied":
        return generator.integers(0, 9, n) * 1.0, generator.integers(0, 12, n) * 1.0
    if kind == "thirds":
        x = np.arange(n, dtype=float)
        return np.where(generator.uniform(size=n) < 0.2, 50.0, x / 3), x
    if kind == "tenths":
        return generator.integers(0, 300, n) / 10, generator.integers(0, 500, n) / 10
    if kind == "two places":
        return generator.normal(size=n), generator.integers(0, 2, n) * 1.0
    x = np.round(generator.uniform(0, 100, n), 3) + 1e9
    return generator.normal(size=n).round(4) + 3 * (x - 1e9), x


@pytest.mark.parametrize(
    "kind", ["continuous", "tied", "thirds", "tenths", "two places", "far from 0"]
)
@pytest.mark.parametrize("n", [200, 1200])
def test_larger_groups(estimate: Estimate, kind: str, n: int) -> None:
    """Compiled, with the search at work."""
    y, x = drawn(kind, n)
    pairs = list(zip(y.tolist(), x.tolist(), strict=True))
    slopes = slopes_of(pairs)
    line = estimate("theil_sen", y, x)
    upper_half = slopes[np.triu_indices(n, 1)]
    upper_half = upper_half[~np.isnan(upper_half)]
    assert line["slope"] == pytest.approx(np.median(upper_half), rel=1e-14, abs=0.0)
    line = estimate("repeated_median", y, x)
    expected = np.median(np.nanmedian(slopes, axis=1))
    assert line["slope"] == pytest.approx(expected, rel=1e-14, abs=0.0)


def test_points_on_a_line_give_that_line(estimate: Estimate) -> None:
    x = np.arange(500.0)
    for name in ("theil_sen", "repeated_median", "resistant_line"):
        line = estimate(name, 3 - x / 4, x)
        assert line["slope"] == -0.25 and line["intercept"] == 3.0
        flat = estimate(name, np.full(500, 7.5), x)
        assert flat["slope"] == 0.0 and flat["intercept"] == 7.5
        assert math.copysign(1.0, flat["slope"]) == 1.0
        assert line.get("half_slope_ratio", 1.0) == 1.0


def test_a_share_of_wild_rows_does_not_carry_a_line_off(
    estimate: Estimate, generator: np.random.Generator
) -> None:
    """Declared breakdown points: just under them the slope stays near 2, just over it does not."""
    x = generator.uniform(0.0, 10.0, 600)
    y = 2 * x + generator.normal(size=600)
    for name, point in (("theil_sen", 1 - math.sqrt(0.5)), ("repeated_median", 0.5)):
        for share, held in ((point - 0.03, True), (point + 0.03, False)):
            count = int(share * 600)
            wild_y, wild_x = y.copy(), x.copy()
            wild_x[:count] = 1e6 + np.arange(count)
            wild_y[:count] = -1e9 - 1e9 * np.arange(count)
            slope = estimate(name, wild_y, wild_x)["slope"]
            assert (abs(slope - 2) < 10) == held, (name, share, slope)


def test_infinite_values_act_as_values_far_beyond(
    estimate: Estimate, generator: np.random.Generator
) -> None:
    x = generator.uniform(0.0, 10.0, 300)
    y = 2 * x + generator.normal(size=300)
    for name in ("theil_sen", "repeated_median"):
        for place in ((math.inf, None), (-math.inf, None), (None, math.inf), (None, -math.inf)):
            found = []
            for far in (True, False):
                wild_y, wild_x = y.copy(), x.copy()
                for column, value in ((wild_y, place[0]), (wild_x, place[1])):
                    if value is not None:
                        column[17] = value if far else math.copysign(1e200, value)
                found.append(estimate(name, wild_y, wild_x))
            assert found[0]["slope"] == pytest.approx(found[1]["slope"], rel=1e-12)
            assert found[0]["intercept"] == pytest.approx(found[1]["intercept"], rel=1e-9)


def test_too_few_pairs_for_bounds(estimate: Estimate) -> None:
    line = estimate("theil_sen", [1.0, 2.0, 4.0, 3.0], [1.0, 2.0, 3.0, 4.0])
    assert line["slope"] is not None and line["lower"] is None and line["upper"] is None
    line = estimate("theil_sen", [1.0, 2.0, 4.0, 3.0], [1.0, 2.0, 3.0, 4.0], confidence=0.5)
    assert line["lower"] <= line["slope"] <= line["upper"]


def test_all_x_equal_gives_null(estimate: Estimate) -> None:
    for name in ("theil_sen", "repeated_median", "resistant_line"):
        line = estimate(name, [1.0, 2.0, 4.0], [5.0] * 3)
        assert set(line.values()) == {None}


def test_bounds_hold_the_slope_as_often_as_they_say(
    connection: duckdb.DuckDBPyConnection, generator: np.random.Generator
) -> None:
    """2,000 samples of 25: within four standard errors of 90 %, rounding of ranks included."""
    g = np.repeat(np.arange(2000), 25)
    x = generator.uniform(size=g.size)
    connection.register("drawn", {"g": g, "x": x, "y": 5 * x + generator.normal(size=g.size)})
    held = connection.execute(
        "SELECT avg((t.lower <= 5 AND 5 <= t.upper)::INTEGER) "
        "FROM (SELECT theil_sen(y, x, 0.9) AS t FROM drawn GROUP BY g)"
    ).fetchall()[0][0]
    connection.unregister("drawn")
    assert abs(held - 0.9) < 0.027 + 0.01
