"""`row_flags`: rows come back whole, with limits equal to the aggregates' and honest NULLs."""

import functools
import math
from typing import Any

import duckdb
import numpy as np
import pyarrow as pa
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from midspread.udfs import register
from tests.udfs.table_calls import answer, complaint

ADDED = ["lower", "upper", "outside", "distance", "rule"]
RULES = ("fences", "adjusted_fences", "median_mad")


@functools.cache
def equipped() -> duckdb.DuckDBPyConnection:
    """One connection for all examples: equipping one takes longer than asking."""
    connection = duckdb.connect()
    register(connection)
    return connection


def flags(connection: duckdb.DuckDBPyConnection, values: list[Any], more: str = "") -> Any:
    """The flags of one group of values, in their order."""
    table = pa.table({"i": np.arange(len(values)), "v": pa.array(values, pa.float64())})
    connection.register("given_values", table)
    try:
        return answer(connection, f"FROM row_flags('given_values', 'v'{more}) ORDER BY i")
    finally:
        connection.unregister("given_values")


def test_every_row_and_column_comes_back(larkmoor: duckdb.DuckDBPyConnection) -> None:
    call = "row_flags('visits', 'dwell_s', by := ['route', 'stop'])"
    relation = larkmoor.sql(f"FROM {call}")
    own = larkmoor.sql("FROM visits")
    assert relation.columns == [*own.columns, *ADDED]
    assert [str(t) for t in relation.types[-5:]] == [
        "DOUBLE", "DOUBLE", "BOOLEAN", "DOUBLE", "VARCHAR",
    ]  # fmt: skip
    back = f"SELECT * EXCLUDE (lower, upper, outside, distance, rule) FROM {call} ORDER BY visit"
    assert larkmoor.execute(back).fetchall() == own.order("visit").fetchall()


@pytest.mark.parametrize(
    ("rule", "limits"),
    [
        ("rule := 'fences'", "fences(dwell_s)"),
        ("rule := 'fences', k := 3", "fences(dwell_s, 3)"),
        ("rule := 'adjusted_fences'", "adjusted_fences(dwell_s)"),
        ("rule := 'Median_MAD'", "{lower: median(dwell_s) - 3 * mad_scale(dwell_s), "
         "upper: median(dwell_s) + 3 * mad_scale(dwell_s)}"),
        ("k := 0.5, rule := 'median_mad'", "{lower: median(dwell_s) - 0.5 * mad_scale(dwell_s), "
         "upper: median(dwell_s) + 0.5 * mad_scale(dwell_s)}"),
        ("rule := NULL", "fences(dwell_s)"),
    ],
)  # fmt: skip
def test_limits_and_distances_are_those_of_the_aggregates(
    larkmoor: duckdb.DuckDBPyConnection, rule: str, limits: str
) -> None:
    ours = f"FROM row_flags('visits', 'dwell_s', by := 'stop', {rule}) ORDER BY visit"
    joined = f"""
        SELECT v.*, l.lower, l.upper, dwell_s < l.lower OR dwell_s > l.upper AS outside,
            abs(dwell_s - m) / s AS distance
        FROM visits v JOIN (SELECT stop, {limits} AS l, median(dwell_s) AS m,
            mad_scale(dwell_s) AS s FROM visits GROUP BY stop) g
        ON v.stop IS NOT DISTINCT FROM g.stop ORDER BY visit"""
    rows = answer(larkmoor, ours)
    expected = answer(larkmoor, joined)
    assert [{k: v for k, v in row.items() if k != "rule"} for row in rows] == expected
    assert {row["outside"] for row in rows} >= {False, None}


def test_the_rule_follows_the_size_of_the_group(larkmoor: duckdb.DuckDBPyConnection) -> None:
    values = [math.exp(i / 30) for i in range(99)]
    assert {row["rule"] for row in flags(larkmoor, [*values, None, None])} == {"fences"}
    rows = flags(larkmoor, [*values, 30.0])
    assert {row["rule"] for row in rows} == {"adjusted_fences"}
    assert rows[0] == flags(larkmoor, [*values, 30.0], ", rule := 'adjusted_fences'")[0]
    table = "(SELECT i % 3 = 0 AND i < 270 AS g, i::DOUBLE AS v FROM range(300) t(i))"
    chosen = answer(
        larkmoor, f"SELECT DISTINCT g, rule FROM row_flags('{table}', 'v', by := 'g') ORDER BY g"
    )
    assert [row["rule"] for row in chosen] == ["adjusted_fences", "fences"]


def test_null_nan_and_infinity(larkmoor: duckdb.DuckDBPyConnection) -> None:
    rows = flags(larkmoor, [1.0, 2.0, None, 3.0, 4.0, math.inf])
    assert [row["outside"] for row in rows] == [False, False, None, False, False, True]
    assert rows[2]["distance"] is None and rows[2]["upper"] == rows[0]["upper"]
    assert rows[5]["distance"] == math.inf
    rows = flags(larkmoor, [1.0, 2.0, math.nan, 100.0])
    assert all(row["outside"] is None for row in rows)
    assert all(math.isnan(row[name]) for row in rows for name in ("lower", "upper", "distance"))
    (row,) = flags(larkmoor, [None])
    assert [row[name] for name in ADDED] == [None] * 5


def test_no_scale_no_distance(larkmoor: duckdb.DuckDBPyConnection) -> None:
    rows = flags(larkmoor, [5.0] * 7 + [6.0], ", rule := 'median_mad'")
    assert [row["outside"] for row in rows] == [False] * 7 + [True]
    assert all(row["distance"] is None for row in rows)


def test_no_rows(larkmoor: duckdb.DuckDBPyConnection) -> None:
    for more in ("", ", by := 'route'"):
        assert answer(larkmoor, f"FROM row_flags('(FROM visits LIMIT 0)', 'dwell_s'{more})") == []


@pytest.mark.parametrize(
    ("call", "sentence"),
    [
        ("'visits', 'dwell_s', rule := 'mean'", "rule must be 'fences', 'adjusted_fences' or"),
        ("'visits', 'dwell_s', rule := 3", "rule must be 'fences', 'adjusted_fences' or"),
        ("'visits', 'dwell_s', k := 2", "k goes with the rules 'fences' and 'median_mad' only"),
        (
            "'visits', 'dwell_s', rule := 'adjusted_fences', k := 2",
            "k goes with the rules 'fences' and 'median_mad' only, got k := 2 with rule",
        ),
        ("'visits', 'dwell_s', rule := 'fences', k := -1", "k must be a number from 0 up, got -1"),
        ("'visits', 'dwell_s', rule := 'fences', k := 'a'", "k must be a number from 0 up, got"),
        ("'visits', 'dwell_s', rule := 'fences', k := true", "k must be a number from 0 up, got"),
        ("'visits', 'dwell_s', by := 'rule'", "by names rule, which is also a column"),
        ("'(SELECT 1 AS v, 2 AS Outside)', 'v'", "the table has a column Outside, which is also"),
        ("'visits', NULL", "value must be the name of a column"),
    ],
)
def test_refusals(larkmoor: duckdb.DuckDBPyConnection, call: str, sentence: str) -> None:
    said = complaint(larkmoor, f"FROM row_flags({call})")
    assert said.startswith(f"row_flags: {sentence}")
    assert said.endswith(".")


MEASURED = st.lists(
    st.one_of(st.none(), st.integers(-50, 50), st.floats(-1e6, 1e6)), min_size=1, max_size=150
)


@settings(max_examples=60, deadline=None)
@given(MEASURED, st.sampled_from(RULES))
def test_order_of_rows_does_not_matter(values: list[float | None], rule: str) -> None:
    connection = equipped()
    more = f", rule := '{rule}'"
    forward = flags(connection, values, more)
    backward = flags(connection, values[::-1], more)[::-1]
    for row, other in zip(forward, backward, strict=True):
        assert [row[name] for name in ADDED] == [other[name] for name in ADDED]


@settings(max_examples=60, deadline=None)
@given(st.lists(st.integers(-1000, 1000), min_size=1, max_size=150), st.sampled_from(RULES))
def test_a_shift_of_a_thousand_million_flags_the_same(values: list[int], rule: str) -> None:
    connection = equipped()
    more = f", rule := '{rule}'"
    here = flags(connection, [value / 8 for value in values], more)
    there = flags(connection, [value / 8 + 1e9 for value in values], more)
    for row, other in zip(here, there, strict=True):
        if min(abs(row["v"] - row[side]) for side in ("lower", "upper")) > 1e-6:
            assert row["outside"] == other["outside"]
        assert (row["distance"] is None) == (other["distance"] is None)
        if row["distance"] is not None:
            assert other["distance"] == pytest.approx(row["distance"], rel=1e-12)


@pytest.mark.parametrize("threads", [1, 3])
def test_same_bits_for_any_number_of_threads(threads: int) -> None:
    with duckdb.connect(config={"threads": threads}) as connection:
        register(connection)
        connection.execute(
            "CREATE TABLE t AS SELECT i, hash(i) % 40 AS g, exp((hash(i) % 9973) / 3000.0) AS v "
            "FROM range(400_000) r(i)"
        )
        sql = "SELECT bit_xor(hash(f)) FROM row_flags('t', 'v', by := 'g') f"
        found = connection.execute(sql).fetchall()
    with duckdb.connect(config={"threads": 2}) as other:
        register(other)
        other.execute(
            "CREATE TABLE t AS SELECT i, hash(i) % 40 AS g, exp((hash(i) % 9973) / 3000.0) AS v "
            "FROM range(400_000) r(i) ORDER BY hash(i + 1)"
        )
        assert other.execute(sql).fetchall() == found
