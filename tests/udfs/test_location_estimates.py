"""`location_estimates`: joint errors, both methods, gaps, and the same bits in every order."""

import math
from typing import Any

import duckdb
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from midspread.udfs import register
from midspread.udfs.binding.computing import Work
from midspread.udfs.grouped import Control, Groups
from midspread.udfs.sensitivity.joint_estimates import ESTIMATORS, joint_figures
from tests.udfs.calling import bits
from tests.udfs.table_calls import answer, complaint

CALLS = {
    "mean": "trimmed_mean(x, 0)",
    "trimmed_mean_10": "trimmed_mean(x, 0.1)",
    "trimmed_mean_20": "trimmed_mean(x, 0.2)",
    "winsorized_mean_20": "winsorized_mean(x, 0.2)",
    "median": "trimmed_mean(x, 0.5)",
    "trimean": "trimean(x)",
    "huber_location": "huber_location(x)",
    "bisquare_location": "bisquare_location(x)",
    "hodges_lehmann": "hodges_lehmann(x)",
}


def estimated(
    connection: duckdb.DuckDBPyConnection, values: list[float | None], more: str = ""
) -> dict[str, dict[str, Any]]:
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE given AS SELECT unnest(?::DOUBLE[]) AS x", [values]
    )
    rows = answer(connection, f"FROM location_estimates('given', 'x'{more})")
    assert [row["estimator"] for row in rows] == [*CALLS]
    return {row["estimator"]: row for row in rows}


@settings(max_examples=25, deadline=None)
@given(st.lists(st.integers(-400, 400).map(lambda v: v / 8), min_size=1, max_size=60))
def test_estimates_are_those_of_the_functions(
    connection: duckdb.DuckDBPyConnection, values: list[float]
) -> None:
    rows = estimated(connection, [*values, None], ", resamples := 30")
    found = connection.execute(f"SELECT {', '.join(CALLS.values())} FROM given").fetchall()[0]
    for name, expected in zip(CALLS, found, strict=True):
        row = rows[name]
        assert row["estimate"] == expected and row["n"] == len(values)
        assert row["difference"] == pytest.approx(expected - found[0], abs=1e-12)
        if len(values) == 1:
            assert row["se"] is None and row["lower"] is None
        else:
            assert row["se"] >= 0.0
            assert row["lower"] + row["upper"] == pytest.approx(2 * expected, abs=1e-9)
    assert rows["mean"]["difference"] == 0.0 and rows["mean"]["difference_in_se"] is None


@pytest.mark.parametrize("n", [500, 20_000])
def test_shifted_and_scaled(connection: duckdb.DuckDBPyConnection, n: int) -> None:
    """Resamples and parts go by content, so a change of origin is compared statistically."""
    values = [float(v) for v in np.round(np.random.default_rng(7).lognormal(3, 0.5, n) * 64) / 64]
    plain = estimated(connection, values)
    shifted = estimated(connection, [v + 2.0**30 for v in values])
    for name, row in plain.items():
        assert shifted[name]["difference"] == pytest.approx(row["difference"], abs=1e-10)
        assert shifted[name]["se"] == pytest.approx(row["se"], rel=0.25)
        if name != "mean":
            assert shifted[name]["difference_in_se"] == pytest.approx(
                row["difference_in_se"], rel=0.3
            )


def test_both_methods_agree() -> None:
    """The same 20,000 skewed values resampled 400 times, and dealt into 200 parts."""
    x = np.random.default_rng(11).lognormal(3.0, 0.45, 20_000)
    groups = Groups(x, np.array([0, x.size]))
    work = Work(Control(), 2)
    drawn = joint_figures(groups, 0.95, 400, 0, work, bootstrapped=x.size)[0]
    dealt = joint_figures(groups, 0.95, 400, 0, work)[0]
    for place in range(len(ESTIMATORS)):
        assert dealt[place, 0] == drawn[place, 0]
        # Each is good to 3.5 and 5 %: four standard deviations of their ratio.
        assert dealt[place, 1] / drawn[place, 1] == pytest.approx(1.0, abs=0.25)
        if place:
            assert dealt[place, 5] / drawn[place, 5] == pytest.approx(1.0, abs=0.25)


@pytest.mark.parametrize("n", [400, 12_000])
def test_the_seed_draws_anew(connection: duckdb.DuckDBPyConnection, n: int) -> None:
    values: list[float | None] = [float(i * i % 1009) for i in range(n)]
    first = estimated(connection, values)
    assert estimated(connection, values[::-1]) == first
    other = estimated(connection, values, ", seed := 1")
    assert all(other[name]["se"] != first[name]["se"] for name in CALLS)
    assert all(other[name]["estimate"] == first[name]["estimate"] for name in CALLS)


def test_confidence_widens(connection: duckdb.DuckDBPyConnection) -> None:
    values: list[float | None] = [float(i % 13) for i in range(100)]
    narrow = estimated(connection, values, ", confidence := 0.5")
    wide = estimated(connection, values, ", confidence := 0.99")
    for name in CALLS:
        assert wide[name]["lower"] < narrow[name]["lower"] < narrow[name]["estimate"]
        assert wide[name]["se"] == narrow[name]["se"]


def test_gaps(connection: duckdb.DuckDBPyConnection) -> None:
    for row in estimated(connection, [None, None]).values():
        assert row["n"] == 0
        assert all(row[name] is None for name in list(row)[2:])
    for row in estimated(connection, [0.1] * 40).values():
        assert row["estimate"] == row["lower"] == row["upper"] == 0.1
        assert row["se"] == row["difference"] == 0.0 and row["difference_in_se"] is None
    for n in (5, 15_000):
        for row in estimated(connection, [*(float(i) for i in range(n)), math.nan]).values():
            assert all(math.isnan(row[name]) for name in ("estimate", "se", "lower", "upper"))
    rows = estimated(connection, [*(float(i) for i in range(50)), math.inf])
    assert rows["mean"]["estimate"] == math.inf and math.isnan(rows["mean"]["se"])
    assert math.isfinite(rows["trimmed_mean_20"]["se"])


def test_the_same_bits_for_any_order_and_number_of_threads() -> None:
    found = []
    for threads, order in ((1, "i"), (3, "hash(i)")):
        with duckdb.connect(config={"threads": threads}) as connection:
            register(connection)
            connection.execute(
                "CREATE TABLE visits AS SELECT CASE WHEN i < 15000 THEN 0 ELSE i % 5 END AS route, "
                "(hash(i * 5) % 4001) / 8.0 AS dwell_s "
                f"FROM range(16000) t(i) ORDER BY {order}"
            )
            rows = answer(connection, "FROM location_estimates('visits', 'dwell_s', by := 'route')")
            found.append([bits(row) for row in rows])
    assert found[0] == found[1]
    assert len(found[0]) == 45


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        ("confidence := 1", "confidence must be a number above 0 and below 1, got 1;"),
        ("confidence := 'high'", "confidence must be a number above 0 and below 1, got 'high';"),
        ("resamples := 1", "resamples must be a whole number from 2 to 100000, got 1;"),
        ("resamples := 2.5", "resamples must be a whole number from 2 to 100000, got 2.5;"),
        ("seed := -1", "seed must be a whole number from 0 to 9.0072e+15, got -1;"),
        ("by := 'se'", "by names se, which is also a column of the result;"),
    ],
)
def test_wrong_arguments(
    larkmoor: duckdb.DuckDBPyConnection, arguments: str, sentence: str
) -> None:
    said = complaint(larkmoor, f"FROM location_estimates('visits', 'dwell_s', {arguments})")
    assert said.startswith(f"location_estimates: {sentence}")
    assert said.endswith(".")
