"""`power_ladder`: what each row says, which rung is best, expressions, bad input."""

import math
from typing import Any

import duckdb
import numpy as np
import pyarrow as pa
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tests.udfs.calling import bits
from tests.udfs.table_calls import answer, complaint

REPRODUCIBLE = settings(max_examples=60, deadline=None, derandomize=True)
FIGURES = ("skewness", "bowley_skew", "medcouple", "normal_plot_corr")
EIGHTHS = st.lists(st.integers(0, 2**20).map(lambda i: i / 8), min_size=1, max_size=40)


def ladder(connection: duckdb.DuckDBPyConnection, x: Any, more: str = "") -> list[dict[str, Any]]:
    """The rows for one group of values."""
    connection.register("given_values", pa.table({"x": pa.array(x, pa.float64())}))
    try:
        return answer(connection, f"FROM power_ladder('given_values', 'x'{more})")
    finally:
        connection.unregister("given_values")


@REPRODUCIBLE
@given(x=EIGHTHS)
def test_figures_are_those_of_the_rung(
    connection: duckdb.DuckDBPyConnection, x: list[float]
) -> None:
    """Each row says what the aggregates say of the values of `rung`."""
    for row in ladder(connection, x):
        ((n, bowley, medcouple),) = connection.execute(
            "SELECT count(y), bowley_skew(y), medcouple(y) "
            "FROM (SELECT rung(x, ?) AS y FROM (SELECT unnest(?::DOUBLE[]) AS x))",
            [row["power"], x],
        ).fetchall()
        assert (row["n"], row["n_lost"]) == (n, len(x) - n)
        if row["medcouple"] is None:
            assert medcouple in (0.0, None)
        else:
            assert row["medcouple"] == pytest.approx(medcouple, abs=1e-6)
        if row["bowley_skew"] is not None and bowley is not None:
            assert row["bowley_skew"] == pytest.approx(bowley, abs=1e-6)


@REPRODUCIBLE
@given(x=EIGHTHS)
def test_one_rung_is_best(connection: duckdb.DuckDBPyConnection, x: list[float]) -> None:
    rows = ladder(connection, x)
    allowed = [row for row in rows if row["n_lost"] == 0 and row["medcouple"] is not None]
    best = [row for row in rows if row["best"]]
    assert all(row["best"] is not None for row in rows)
    assert len(best) == (1 if allowed else 0)
    if allowed:
        least = min(abs(row["medcouple"]) for row in allowed)
        equal = [row["power"] for row in allowed if abs(row["medcouple"]) == least]
        assert best[0]["power"] == min(equal, key=lambda power: (abs(power - 1), -power))


@pytest.mark.parametrize("power", [-1.0, 0.0, 0.5, 2.0])
def test_the_rung_that_made_the_values_symmetric_is_found(
    connection: duckdb.DuckDBPyConnection, generator: np.random.Generator, power: float
) -> None:
    """Also with one wild value in a hundred, where the likelihood is a rung away."""
    even = np.clip(generator.normal(1.0, 0.25, 50_000), 0.05, 1.95)
    x = np.exp(2 * even) if power == 0 else even ** (1 / power)
    rows = ladder(connection, x)
    assert [row["power"] for row in rows if row["best"]] == [power]
    x[:500] = 40 * x.max()
    rows = ladder(connection, x)
    assert [row["power"] for row in rows if row["best"]] == [power]


def test_the_expression_gives_the_rung(connection: duckdb.DuckDBPyConnection) -> None:
    """Pasted as it stands, it gives what `rung` gives."""
    x = [0.25, 1.0, 3.0, 7.5, 90.0]
    connection.execute(
        'CREATE OR REPLACE TEMP TABLE pasted AS SELECT unnest(?::DOUBLE[]) AS "dwell ""s"""', [x]
    )
    rows = answer(
        connection, """FROM power_ladder('pasted', 'dwell "s"', powers := [-0.5,0,1,2])"""
    )
    name = '"dwell ""s"""'
    assert [row["expression"] for row in rows] == [
        f"-power({name}, -0.5)",
        f"ln({name})",
        name,
        f"power({name}, 2)",
    ]
    for row in rows:
        made, rung = zip(
            *connection.execute(
                f"SELECT {row['expression']}, rung({name}, {row['power']}) FROM pasted"
            ).fetchall(),
            strict=True,
        )
        assert made == rung


def test_digits_hold_far_from_zero(
    connection: duckdb.DuckDBPyConnection, generator: np.random.Generator
) -> None:
    """Near 1e9 every rung is all but straight, so the shape is that of the values themselves."""
    x = np.round(generator.gamma(2.0, 5.0, 500) * 8) / 8
    (plain,) = ladder(connection, x, ", powers := [1]")
    for row in ladder(connection, x + 1e9):
        for figure in FIGURES:
            assert row[figure] == pytest.approx(plain[figure], abs=3e-7)
        assert row["power"] != 1.0 or row["skewness"] == pytest.approx(plain["skewness"], rel=1e-13)


def test_lost_values_and_empty_groups(connection: duckdb.DuckDBPyConnection) -> None:
    rows = {row["power"]: row for row in ladder(connection, [-2.0, 0.0, 0.0, 1.0, 2.0, 4.0, None])}
    assert {p: (row["n"], row["n_lost"]) for p, row in rows.items()} == {
        **dict.fromkeys((-2.0, -1.0, -0.5, 0.0), (3, 3)),
        **dict.fromkeys((0.5, 2.0, 3.0), (5, 1)),
        1.0: (6, 0),
    }
    assert [p for p, row in rows.items() if row["best"]] == [1.0]
    for x in ([None, None], [], [5.0] * 4, [3.0], [0.0, 0.0]):
        for row in ladder(connection, x, ", powers := [0.5, 1]"):
            assert row["n"] == sum(v is not None for v in x) and row["n_lost"] == 0
            assert [row[figure] for figure in FIGURES] == [None] * 4
            assert row["best"] is False
    for row in ladder(connection, [1.0, math.nan, 4.0, 9.0]):
        assert all(math.isnan(row[figure]) for figure in FIGURES) and row["best"] is False
    for row in ladder(
        connection, [1.0, 2.0, 3.0, 5.0, 8.0, 9.0, math.inf], ", powers := [-1, 0, 1]"
    ):
        finite = row["power"] < 0
        assert math.isfinite(row["skewness"]) == math.isfinite(row["normal_plot_corr"]) == finite
        assert math.isfinite(row["medcouple"])


def test_order_of_rows_and_threads_do_not_show(
    connection: duckdb.DuckDBPyConnection, generator: np.random.Generator
) -> None:
    x = np.round(generator.lognormal(3.0, 1.0, 999), 1)
    found = [bits(ladder(connection, generator.permutation(x))) for _ in range(3)]
    assert found[0] == found[1] == found[2]


def test_wrong_powers(connection: duckdb.DuckDBPyConnection) -> None:
    for wrong in ("[-11]", "[]", "NULL", "['nan'::DOUBLE]"):
        said = complaint(
            connection, f"FROM power_ladder('(SELECT 1 AS x)', 'x', powers := {wrong})"
        )
        assert said.startswith("power_ladder: powers must be numbers from -10 to 10, got ")
