"""`straightening_pairs`: the curve that a pair of rungs straightens, figures, bad input."""

import math
from typing import Any

import duckdb
import numpy as np
import pyarrow as pa
import pytest
import scipy.stats
from hypothesis import given, settings
from hypothesis import strategies as st

from tests.udfs.calling import bits
from tests.udfs.table_calls import answer, complaint

REPRODUCIBLE = settings(max_examples=40, deadline=None, derandomize=True)
ROWS = st.lists(
    st.tuples(st.integers(0, 90).map(lambda i: i / 8), st.integers(0, 90).map(lambda i: i / 4)),
    min_size=3,
    max_size=40,
)


def pairs(
    connection: duckdb.DuckDBPyConnection, y: Any, x: Any, more: str = ""
) -> dict[tuple[float, float], dict[str, Any]]:
    """The rows for one group, by their powers."""
    table = pa.table({"y": pa.array(y, pa.float64()), "x": pa.array(x, pa.float64())})
    connection.register("given_rows", table)
    try:
        found = answer(connection, f"FROM straightening_pairs('given_rows', 'y', 'x'{more})")
    finally:
        connection.unregister("given_rows")
    return {(row["y_power"], row["x_power"]): row for row in found}


def on_rung(v: np.ndarray, power: float) -> np.ndarray:
    return np.log(v) if power == 0 else np.sign(power) * v**power


def half_slope_ratio(y: np.ndarray, x: np.ndarray) -> float | None:
    """From the definition of the three-group line, on values that are re-expressed already."""
    ordered = np.sort(x)
    thirds = [(x.size - 1) / 3, 2 * (x.size - 1) / 3]
    low, high = ((ordered[math.floor(t)] + ordered[math.ceil(t)]) / 2 for t in thirds)
    middle = (x > low) & (x < high)
    if not middle.any():
        return None
    mx = [np.median(x[m]) for m in (x <= low, middle, x >= high)]
    my = [np.median(y[m]) for m in (x <= low, middle, x >= high)]
    if mx[0] == mx[1] or mx[1] == mx[2] or my[0] == my[1]:
        return None
    return float((my[2] - my[1]) / (mx[2] - mx[1]) / ((my[1] - my[0]) / (mx[1] - mx[0])))


@REPRODUCIBLE
@given(rows=ROWS)
def test_figures_by_their_definitions(
    connection: duckdb.DuckDBPyConnection, rows: list[tuple[float, float]]
) -> None:
    """Each pair by itself: re-express both columns, then thirds and winsorizing."""
    given_y, given_x = (np.array(column) for column in zip(*rows, strict=True))
    for (y_power, x_power), row in pairs(connection, given_y, given_x).items():
        keep = (given_y > 0) | (y_power == 1) | ((y_power > 0) & (given_y == 0))
        keep &= (given_x > 0) | (x_power == 1) | ((x_power > 0) & (given_x == 0))
        y, x = given_y[keep], given_x[keep]
        assert (row["n"], row["n_lost"]) == (y.size, given_y.size - y.size)
        if y.size < 3:
            assert row["half_slope_ratio"] is None and row["winsorized_corr"] is None
            continue
        y, x = on_rung(y, y_power), on_rung(x, x_power)
        expected = half_slope_ratio(y, x)
        if expected is not None and row["half_slope_ratio"] is not None:
            assert row["half_slope_ratio"] == pytest.approx(expected, rel=1e-7, abs=1e-9)
        elif y_power == x_power == 1.0:
            assert row["half_slope_ratio"] == expected
        pulled = [np.asarray(scipy.stats.mstats.winsorize(v, (0.2, 0.2))) for v in (y, x)]
        if min(np.ptp(v) for v in pulled) == 0:
            assert row["winsorized_corr"] is None
        else:
            r = np.corrcoef(*pulled)[0, 1]
            assert row["winsorized_corr"] == pytest.approx(r, abs=1e-9)


@pytest.mark.parametrize(("y_power", "x_power"), [(0.5, 0.0), (0.0, 0.0), (1.0, -1.0), (2.0, 0.5)])
def test_the_pair_that_made_it_straight_is_straight(
    connection: duckdb.DuckDBPyConnection,
    generator: np.random.Generator,
    y_power: float,
    x_power: float,
) -> None:
    """A line drawn on these rungs, with one wild value in fifty."""
    x = np.exp(generator.uniform(0.0, 3.0, 3000))
    line = on_rung(x, x_power)
    line = 2.0 + 3.0 * (line - line.min()) / np.ptp(line) + generator.normal(0.0, 0.01, x.size)
    y = np.exp(line) if y_power == 0 else line ** (1 / y_power)
    y[::50] *= 50.0
    found = pairs(connection, y, x)
    assert found[y_power, x_power]["half_slope_ratio"] == pytest.approx(1.0, abs=0.05)
    (best,) = [row for row in found.values() if row["straightest"]]
    assert abs(math.log(best["half_slope_ratio"])) <= 0.05
    assert all(row["n_lost"] == 0 and row["n"] == 3000 for row in found.values())
    assert found[1.0, 1.0]["y_expression"] == '"y"'
    assert found[0.0, -1.0]["x_expression"] == '-power("x", -1)'


def test_curves_bend_as_said(connection: duckdb.DuckDBPyConnection) -> None:
    x = np.arange(1.0, 100.0)
    assert pairs(connection, x**2, x)[1.0, 1.0]["half_slope_ratio"] > 1.5
    assert 0 < pairs(connection, np.sqrt(x), x)[1.0, 1.0]["half_slope_ratio"] < 0.8
    assert pairs(connection, (x - 50) ** 2, x)[1.0, 1.0]["half_slope_ratio"] < 0
    line = pairs(connection, 3 * x + 2, x)
    assert line[1.0, 1.0]["half_slope_ratio"] == pytest.approx(1.0, rel=1e-14)
    assert line[1.0, 1.0]["winsorized_corr"] == pytest.approx(1.0, rel=1e-14)
    assert [key for key, row in line.items() if row["straightest"]] == [(1.0, 1.0)]


def test_digits_hold_far_from_zero(
    connection: duckdb.DuckDBPyConnection, generator: np.random.Generator
) -> None:
    x = np.round(generator.uniform(1, 100, 200) * 8) / 8
    y = x**2 + np.round(generator.normal(0, 50, 200))
    plain = pairs(connection, y, x)[1.0, 1.0]
    for row in pairs(connection, y + 1e10, x + 1e9).values():
        for figure in ("half_slope_ratio", "winsorized_corr"):
            assert row[figure] == pytest.approx(plain[figure], rel=1e-4)


def test_missing_lost_and_spoilt_rows(connection: duckdb.DuckDBPyConnection) -> None:
    y = [1.0, 2.0, None, 4.0, 5.0, 9.0, 0.0, -1.0]
    x = [1.0, 2.0, 3.0, None, 5.0, 0.0, 7.0, 8.0]
    found = pairs(connection, y, x)
    lost = {key: (row["n"], row["n_lost"]) for key, row in found.items()}
    assert lost[1.0, 1.0] == (6, 0)
    assert lost[0.5, 1.0] == (5, 1)
    assert lost[0.0, 2.0] == (4, 2)
    assert lost[0.0, 0.0] == lost[-1.0, -0.5] == (3, 3)
    assert [row["n_lost"] for row in found.values() if row["straightest"]] == [0]
    for row in pairs(connection, [1.0, math.nan, 3.0, 4.0], [1.0, 2.0, 3.0, 5.0]).values():
        assert math.isnan(row["half_slope_ratio"]) and math.isnan(row["winsorized_corr"])
        assert row["straightest"] is False
    for values in ([], [None], [1.0, 2.0], [5.0] * 6):
        for row in pairs(connection, values, values).values():
            assert row["half_slope_ratio"] is None and row["winsorized_corr"] is None
            assert row["n"] == sum(v is not None for v in values)
            assert row["straightest"] is False


def test_order_of_rows_does_not_show(
    connection: duckdb.DuckDBPyConnection, generator: np.random.Generator
) -> None:
    x, y = (np.round(generator.lognormal(2.0, 1.0, 500), 1) for _ in range(2))
    found = []
    for _ in range(3):
        order = generator.permutation(500)
        found.append(bits(list(pairs(connection, y[order], x[order]).values())))
    assert found[0] == found[1] == found[2]


def test_wrong_columns(connection: duckdb.DuckDBPyConnection) -> None:
    source = "'(SELECT 1 AS y, DATE ''2031-03-07'' AS x)'"
    said = complaint(connection, f"FROM straightening_pairs({source}, 'y', 'x')")
    assert "straightening_pairs: x must be a number" in said
    said = complaint(connection, f"FROM straightening_pairs({source}, 'y', 'y', powers := [99])")
    assert said.startswith("straightening_pairs: powers must be numbers from -10 to 10, got ")
