"""Properties of the rank correlations, against a count of all pairs."""

import math

import duckdb
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from midspread.udfs.association.rank_correlations import kendall_tau, spearman
from midspread.udfs.declaring import null_mask
from tests.conftest import Estimate

REPRODUCIBLE = settings(max_examples=150, deadline=None, derandomize=True)
TIED = st.integers(-3, 3).map(float) | st.sampled_from([math.inf, -math.inf, 0.5])
WIDE = st.floats(allow_nan=False)
PAIRS = st.lists(st.tuples(TIED, TIED), min_size=2, max_size=40) | st.lists(
    st.tuples(WIDE, WIDE), min_size=2, max_size=60
)


def sorted_columns(pairs: list[tuple[float, float]]) -> tuple[np.ndarray, np.ndarray]:
    """The pairs as a kernel takes them, −0.0 turned into 0.0."""
    y, x = np.array(sorted((y + 0.0, x + 0.0) for y, x in pairs)).T.copy()
    return y, x


def or_none(number: float) -> float | None:
    return None if null_mask(np.array([number]))[0] else number


def near(figure: float | None, expected: float | None) -> bool:
    if figure is None or expected is None:
        return figure is expected
    return figure == pytest.approx(expected, rel=1e-12, abs=1e-14)


def tau_of_all_pairs(pairs: list[tuple[float, float]]) -> float | None:
    excess = loose_y = loose_x = 0
    for i, (y, x) in enumerate(pairs):
        for other_y, other_x in pairs[:i]:
            by_y, by_x = (y > other_y) - (y < other_y), (x > other_x) - (x < other_x)
            excess += by_y * by_x
            loose_y += by_y != 0
            loose_x += by_x != 0
    return excess / math.sqrt(loose_y * loose_x) if loose_y and loose_x else None


def midranks(values: list[float]) -> list[float]:
    return [sum(v < x for v in values) + (sum(v == x for v in values) + 1) / 2 for x in values]


def rho_of_midranks(pairs: list[tuple[float, float]]) -> float | None:
    y, x = (np.array(midranks(list(column))) for column in zip(*pairs, strict=True))
    y, x = y - y.mean(), x - x.mean()
    squares = math.fsum(y * y) * math.fsum(x * x)
    return math.fsum(y * x) / math.sqrt(squares) if squares else None


@REPRODUCIBLE
@given(pairs=PAIRS)
def test_as_counted_over_all_pairs(pairs: list[tuple[float, float]]) -> None:
    tau, rho = (or_none(kernel(*sorted_columns(pairs))) for kernel in (kendall_tau, spearman))
    assert near(tau, tau_of_all_pairs(pairs))
    assert near(rho, rho_of_midranks(pairs))


@REPRODUCIBLE
@given(pairs=PAIRS)
def test_columns_may_change_places(pairs: list[tuple[float, float]]) -> None:
    turned = [(x, y) for y, x in pairs]
    tau, other = (or_none(kendall_tau(*sorted_columns(p))) for p in (pairs, turned))
    assert tau == other
    rho, other = (or_none(spearman(*sorted_columns(p))) for p in (pairs, turned))
    assert near(rho, other)


@REPRODUCIBLE
@given(pairs=PAIRS)
def test_only_the_order_counts(pairs: list[tuple[float, float]]) -> None:
    """Any rising re-expression leaves both as they are, a falling one turns the sign."""
    places = {v: i for i, v in enumerate(sorted({y + 0.0 for y, _ in pairs}))}
    risen = [(float(places[y + 0.0]) ** 3, x) for y, x in pairs]
    fallen = [(-y, x) for y, x in risen]
    for kernel in (kendall_tau, spearman):
        figure = or_none(kernel(*sorted_columns(pairs)))
        assert or_none(kernel(*sorted_columns(risen))) == figure
        opposite = or_none(kernel(*sorted_columns(fallen)))
        assert near(opposite, None if figure is None else -figure)


@pytest.mark.parametrize("n", [2, 3, 17, 1000, 70_001])
def test_perfect_order_is_one_to_the_bit(estimate: Estimate, n: int) -> None:
    x = np.arange(n) ** 1.5
    for name in ("kendall_tau", "spearman"):
        assert estimate(name, np.log1p(x), x) == 1.0
        assert estimate(name, -np.sqrt(x), x) == -1.0
        tied = np.floor(np.arange(n) / 2)
        if n > 2:
            assert estimate(name, tied, tied * 3) == 1.0


def test_a_million_pairs(connection: duckdb.DuckDBPyConnection) -> None:
    """Independent columns: both near 0; y = x but for noise: tau = 2/π arcsin(r) of Greiner."""
    generator = np.random.default_rng(6)
    x, e = generator.normal(size=1_000_000), generator.normal(size=1_000_000)
    connection.register("drawn", {"x": x, "e": e, "y": x + e})
    query = "SELECT kendall_tau(e, x), spearman(e, x), kendall_tau(y, x), spearman(y, x) FROM drawn"
    loose_tau, loose_rho, tau, rho = connection.execute(query).fetchall()[0]
    connection.unregister("drawn")
    assert abs(loose_tau) < 0.005 and abs(loose_rho) < 0.005
    assert tau == pytest.approx(2 / math.pi * math.asin(math.sqrt(0.5)), abs=0.005)
    assert rho == pytest.approx(6 / math.pi * math.asin(math.sqrt(0.5) / 2), abs=0.005)


def test_a_column_that_does_not_vary_gives_null(estimate: Estimate) -> None:
    for name in ("kendall_tau", "spearman"):
        assert estimate(name, [1.0, 2.0, 3.0], [5.0] * 3) is None
        assert estimate(name, [math.inf] * 3, [5.0, 6.0, 7.0]) is None
