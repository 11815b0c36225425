"""`rolling_flags`: windows by brute force, gaps, ends, floors, orders and refusals."""

import functools
import math
import statistics
from typing import Any

import duckdb
import numpy as np
import pyarrow as pa
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from midspread.udfs import register
from tests.udfs.table_calls import answer, complaint

ADDED = ["median", "scale", "outside", "distance"]
Z = statistics.NormalDist().inv_cdf(0.75)


@functools.cache
def equipped() -> duckdb.DuckDBPyConnection:
    """One connection for all examples: equipping one takes longer than asking."""
    connection = duckdb.connect()
    register(connection)
    return connection


def flags(connection: duckdb.DuckDBPyConnection, values: list[Any], more: str = "") -> Any:
    """The flags of one series, in its order; the rows arrive in another."""
    places = np.arange(len(values))
    shuffled = np.random.default_rng(len(values)).permutation(len(values))
    table = pa.table({"i": places[shuffled], "v": pa.array([values[i] for i in shuffled])})
    connection.register("series", table.cast(pa.schema([("i", pa.int64()), ("v", pa.float64())])))
    try:
        return answer(connection, f"FROM rolling_flags('series', 'v', 'i'{more}) ORDER BY i")
    finally:
        connection.unregister("series")


def by_hand(values: list[float | None], half_width: int, k: float, floor: float) -> list[Any]:
    """Hampel's identifier as it is defined, one window after another."""
    rows = []
    for i, value in enumerate(values):
        window = [v for v in values[max(i - half_width, 0) : i + half_width + 1] if v is not None]
        if not window:
            rows.append((None, None, None))
            continue
        centre = statistics.median(window)
        scale = max(statistics.median(abs(v - centre) for v in window) / Z, floor)
        rows.append((centre, scale, None if value is None else abs(value - centre) > k * scale))
    return rows


VALUES = st.lists(
    st.one_of(st.none(), st.integers(-20, 20), st.integers(-3, 3), st.just(1e9)),
    min_size=1,
    max_size=60,
)


@settings(max_examples=150, deadline=None)
@given(VALUES, st.integers(1, 40), st.sampled_from([0.0, 1.0, 3.0]), st.sampled_from([0.0, 0.5]))
def test_equals_brute_force(
    values: list[float | None], half_width: int, k: float, floor: float
) -> None:
    connection = equipped()
    more = f", half_width := {half_width}, k := {k}, floor := {floor}"
    rows = flags(connection, values, more)
    for row, (centre, scale, outside), value in zip(
        rows, by_hand(values, half_width, k, floor), values, strict=True
    ):
        assert row["median"] == centre
        assert row["scale"] == (None if scale is None else pytest.approx(scale, rel=1e-15))
        if value is not None and abs(abs(value - centre) - k * scale) > 1e-9 * (1 + scale):
            assert row["outside"] == outside
        if value is None or scale == 0:
            assert row["distance"] is None
        else:
            assert row["distance"] == pytest.approx(abs(value - centre) / scale, rel=1e-14)
        assert (row["outside"] is None) == (value is None)


def test_medians_are_the_engines_own(larkmoor: duckdb.DuckDBPyConnection) -> None:
    """DuckDB's windowed median with the same frame; NULL takes up a place there as well."""
    frame = "PARTITION BY route, stop ORDER BY visit ROWS BETWEEN 4 PRECEDING AND 4 FOLLOWING"
    expected = larkmoor.execute(
        f"SELECT visit, median(dwell_s) OVER ({frame}) FROM visits ORDER BY visit"
    ).fetchall()
    ours = larkmoor.execute(
        "SELECT visit, median FROM rolling_flags('visits', 'dwell_s', 'visit', "
        "by := ['route', 'stop'], half_width := 4) ORDER BY visit"
    ).fetchall()
    assert ours == expected


def test_every_row_and_column_comes_back(larkmoor: duckdb.DuckDBPyConnection) -> None:
    call = "rolling_flags('visits', 'dwell_s', 'visit', by := 'stop')"
    own = larkmoor.sql("FROM visits")
    assert larkmoor.sql(f"FROM {call}").columns == [*own.columns, *ADDED]
    back = f"SELECT * EXCLUDE (median, scale, outside, distance) FROM {call} ORDER BY visit"
    assert larkmoor.execute(back).fetchall() == own.order("visit").fetchall()


@pytest.mark.parametrize(
    "position",
    [
        "visit", "-visit", "visit::UTINYINT", "visit / 7", "visit::DECIMAL(9,2)",
        "DATE '2031-01-01' + visit::INTEGER", "TIMESTAMP '2031-01-01' + to_seconds(visit)",
        "TIMESTAMPTZ '2031-01-01' + to_minutes(visit)", "TIME '01:00' + to_seconds(visit)",
        "printf('%05d', visit)", "visit - 9223372036854775808::HUGEINT",
    ],
)  # fmt: skip
def test_positions_of_any_type_order_the_rows(
    larkmoor: duckdb.DuckDBPyConnection, position: str
) -> None:
    expected = answer(
        larkmoor, "SELECT visit, median, scale FROM rolling_flags('visits', 'dwell_s', 'visit', "
        "by := 'route') ORDER BY visit"
    )  # fmt: skip
    larkmoor.execute(
        f"CREATE OR REPLACE TEMP TABLE placed AS SELECT *, {position} AS p FROM visits"
    )
    given_rows = answer(
        larkmoor, "SELECT visit, median, scale FROM rolling_flags('placed', 'dwell_s', 'p', "
        "by := 'route') ORDER BY visit"
    )  # fmt: skip
    assert given_rows == expected


def test_a_gap_keeps_its_place_and_has_no_flag(larkmoor: duckdb.DuckDBPyConnection) -> None:
    rows = flags(larkmoor, [1.0, 2.0, None, None, 50.0], ", half_width := 1, floor := 0")
    assert [row["median"] for row in rows] == [1.5, 1.5, 2.0, 50.0, 50.0]
    assert [row["outside"] for row in rows] == [False, False, None, None, False]
    rows = flags(larkmoor, [1.0, None, None, None, 5.0], ", half_width := 1")
    assert rows[2]["median"] is None and rows[2]["scale"] is None
    (row,) = flags(larkmoor, [None])
    assert [row[name] for name in ADDED] == [None] * 4


def test_a_row_without_position_stands_nowhere(larkmoor: duckdb.DuckDBPyConnection) -> None:
    table = "(SELECT nullif(i, 3) AS p, i::DOUBLE AS v FROM range(7) t(i))"
    rows = answer(larkmoor, f"FROM rolling_flags('{table}', 'v', 'p') ORDER BY v")
    assert [rows[3][name] for name in ADDED] == [None] * 4
    assert rows[2]["median"] == 3.0  # of 0, 1, 2, 4, 5, 6
    nowhere = "(SELECT NULL::INTEGER AS p, 1.5 AS v FROM range(3))"
    rows = answer(larkmoor, f"FROM rolling_flags('{nowhere}', 'v', 'p')")
    assert [row["median"] for row in rows] == [None] * 3


def test_nan_and_infinity(larkmoor: duckdb.DuckDBPyConnection) -> None:
    values = [1.0, 2.0, 3.0, math.nan, 5.0, 6.0, 7.0, math.inf, 9.0, 10.0]
    rows = flags(larkmoor, values, ", half_width := 1, floor := 1")
    touched = [math.isnan(row["median"]) for row in rows]
    assert touched == [2 <= i <= 4 for i in range(10)]
    assert all(row["outside"] is None for row in rows[2:5])
    assert rows[7]["outside"] is True and rows[7]["distance"] == math.inf
    assert rows[6]["median"] == 7.0
    default = flags(larkmoor, values, ", half_width := 1")
    assert default[0]["scale"] > 0  # a NaN leaves the floor as it is


def test_default_floor_is_half_the_larger_of_step_and_scale(
    larkmoor: duckdb.DuckDBPyConnection,
) -> None:
    calm = [20.0, 20.0, 25.0, 20.0, 20.0, 20.0, 20.0, 15.0, 20.0, 20.0, 20.0, 20.0, 35.0, 20.0]
    rows = flags(larkmoor, calm)
    # more than half of each window is 20, and so are the residuals: half of the step of 5 is left
    assert {row["scale"] for row in rows} == {2.5}
    assert [row["v"] for row in rows if row["outside"]] == [35.0]
    bare = flags(larkmoor, calm, ", floor := 0")
    assert [row["v"] for row in bare if row["outside"]] == [25.0, 15.0, 35.0]
    assert all(row["distance"] is None for row in bare)
    wavy = [float((i * 7919) % 100) / 16 for i in range(200)]
    rows = flags(larkmoor, wavy)
    residual = statistics.median(abs(row["v"] - row["median"]) for row in rows) / Z
    assert min(row["scale"] for row in rows) >= residual / 2 * (1 - 1e-14)


def test_long_windows_reach_over_the_whole_series(larkmoor: duckdb.DuckDBPyConnection) -> None:
    values = [float((i * i) % 97) for i in range(300)]
    rows = flags(larkmoor, values, ", half_width := 100000, floor := 0")
    ((centre, scale),) = larkmoor.execute(
        "SELECT median(v), mad_scale(v) FROM (SELECT unnest($v) AS v)", {"v": values}
    ).fetchall()
    assert {(row["median"], row["scale"]) for row in rows} == {(centre, scale)}


@pytest.mark.parametrize(
    ("call", "sentence"),
    [
        ("'visits', 'dwell_s', 'day'", "each position may occur once in a group, but day holds"),
        (
            "'visits', 'dwell_s', 'route', by := 'stop'",
            "each position may occur once in a group, but route holds R0 twice",
        ),
        (
            "'(SELECT ''nan''::DOUBLE AS p, 1 AS v FROM range(2))', 'v', 'p'",
            "each position may occur once in a group, but p holds nan twice",
        ),
        ("'visits', 'dwell_s', NULL", "position must be the name of a column, got None"),
        ("'visits', 'dwell_s', 'visit', half_width := 0", "half_width must be a whole number from"),
        ("'visits', 'dwell_s', 'visit', half_width := 2.5", "half_width must be a whole number"),
        ("'visits', 'dwell_s', 'visit', half_width := NULL", "half_width must be a whole number"),
        ("'visits', 'dwell_s', 'visit', k := -1", "k must be a number from 0 up, got -1"),
        ("'visits', 'dwell_s', 'visit', k := NULL", "k must be a number from 0 up, got NULL"),
        ("'visits', 'dwell_s', 'visit', floor := -0.5", "floor must be a number from 0 up"),
        ("'visits', 'dwell_s', 'visit', floor := 'no'", "floor must be a number from 0 up"),
        ("'visits', 'dwell_s', 'visit', by := 'median'", "by names median, which is also"),
        ("'(SELECT 1 AS v, 2 AS p, 3 AS scale)', 'v', 'p'", "the table has a column scale, which"),
    ],
)
def test_refusals(larkmoor: duckdb.DuckDBPyConnection, call: str, sentence: str) -> None:
    said = complaint(larkmoor, f"FROM rolling_flags({call})")
    assert said.startswith(f"rolling_flags: {sentence}")
    assert said.endswith(".")


@pytest.mark.parametrize("threads", [1, 3])
def test_same_bits_for_any_number_of_threads_and_order(threads: int) -> None:
    table = (
        "CREATE TABLE t AS SELECT i, hash(i) % 40 AS g, (hash(i) % 9973) / 7 AS v "
        "FROM range(300_000) r(i)"
    )
    sql = "SELECT bit_xor(hash(f)) FROM rolling_flags('t', 'v', 'i', by := 'g') f"
    with duckdb.connect(config={"threads": threads}) as connection:
        register(connection)
        connection.execute(table)
        found = connection.execute(sql).fetchall()
    with duckdb.connect(config={"threads": 2}) as other:
        register(other)
        other.execute(f"{table} ORDER BY hash(i + 1)")
        assert other.execute(sql).fetchall() == found
