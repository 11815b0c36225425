"""What bootstrap_units, bootstrap_blocks and unit_intervals promise in SQL."""

import math
import threading
import time
from collections.abc import Iterator
from typing import Any

import duckdb
import numpy as np
import pyarrow as pa
import pytest

from midspread.udfs import Control, register
from tests.udfs.calling import bits
from tests.udfs.table_calls import answer, complaint

CALLS = (
    "bootstrap_units(x, unit, resamples := 300)",
    "bootstrap_units(x, unit, 'mean', method := 'bca', resamples := 300)",
    "bootstrap_units(x, unit, 'median', method := 'basic', resamples := 300)",
    "bootstrap_units(x, unit, 'mad_scale', method := 'normal', resamples := 300)",
    "bootstrap_blocks(x, visit, resamples := 300)",
    "bootstrap_blocks(x, visit, 4, 'trimmed_mean(0.2)', resamples := 300)",
    "bootstrap_blocks(x, visit, 4, 'trimean', resamples := 300)",
)
READINGS = """
    SELECT i AS visit,
        CASE WHEN i % 3 = 0 THEN 'one' WHEN i % 50 < 25 THEN 'two' ELSE 'g' || (i // 40 % 60) END
            AS stop,
        CASE WHEN i % 17 = 0 THEN NULL ELSE round(exp((hash(i) % 60000) / 10000.0), 1) END AS x,
        CASE WHEN i % 23 > 0 THEN 'vehicle ' || (i // 7 % 12) END AS unit
    FROM range(12000) AS t(i)
"""


def one(connection: duckdb.DuckDBPyConnection, call: str, rows: str) -> Any:
    return connection.execute(f"SELECT {call} FROM (VALUES {rows}) t(x, unit)").fetchone()[0]  # type: ignore[index]


def equipped(threads: int) -> duckdb.DuckDBPyConnection:
    connection = duckdb.connect(config={"threads": threads})
    register(connection)
    connection.execute(f"CREATE TABLE readings AS {READINGS}")
    return connection


def grouped(connection: duckdb.DuckDBPyConnection, source: str) -> Any:
    listed = ", ".join(CALLS)
    return bits(
        connection.execute(
            f"SELECT stop, {listed} FROM {source} GROUP BY stop ORDER BY stop"
        ).fetchall()
    )


@pytest.fixture(scope="module")
def reference() -> Iterator[Any]:
    with equipped(1) as connection:
        yield grouped(connection, "readings")


@pytest.mark.parametrize("threads", [2, 4])
def test_same_bits_for_any_threads(reference: Any, threads: int) -> None:
    with equipped(threads) as connection:
        assert grouped(connection, "readings") == reference


def test_same_bits_when_large_groups_are_shared(
    reference: Any, monkeypatch: pytest.MonkeyPatch
) -> None:
    """As if every group were so large that its resamples are spread over threads."""
    monkeypatch.setattr("midspread.udfs.resampling.counted_batches._SHARED_WORK", 1)
    with equipped(2) as connection:
        assert grouped(connection, "readings") == reference


@pytest.mark.parametrize("order", ["visit DESC", "hash(visit)", "unit, x"])
def test_same_bits_for_any_order_of_rows(reference: Any, order: str) -> None:
    with equipped(2) as connection:
        assert grouped(connection, f"(FROM readings ORDER BY {order})") == reference


def test_units_enter_by_rank_alone(connection: duckdb.DuckDBPyConnection) -> None:
    """Numbers, dates or texts in the same order are the same units; another seed draws others."""
    call = "bootstrap_units(x, {}, 'mean', resamples := 200{})"
    calls = [
        call.format(unit, more)
        for unit, more in (
            ("i % 9", ""),
            ("DATE '2031-01-01' + CAST(i % 9 AS INTEGER)", ""),
            ("'v' || i % 9", ""),
            ("i % 9", ", seed := 1"),
        )
    ]
    row = connection.execute(
        f"SELECT {', '.join(calls)} FROM (SELECT i, (i * i) % 41 AS x FROM range(90) t(i))"
    ).fetchone()
    assert row is not None
    assert bits(row[0]) == bits(row[1]) == bits(row[2])
    assert row[3]["lower"] != row[0]["lower"] and row[3]["estimate"] == row[0]["estimate"]


def test_too_few_values_or_units_give_null(connection: duckdb.DuckDBPyConnection) -> None:
    for rows in ("(1.5, 'a')", "(1.5, 'a'), (2.5, 'a'), (9, 'a')", "(NULL, 'a')", "(3, NULL)"):
        assert one(connection, "bootstrap_units(x::DOUBLE, unit)", rows) is None
    assert one(connection, "bootstrap_units(x, unit)", "(1.5, 'a'), (2.5, 'b')")["n_units"] == 2
    assert one(connection, "bootstrap_blocks(x, unit)", "(1.5, 1)") is None
    assert one(connection, "bootstrap_blocks(x, unit, 2)", "(1, 1), (2, 2), (4, 3)") is None
    found = one(connection, "bootstrap_blocks(x, unit)", "(1, 1), (2, 2), (4, 3)")
    assert found["block"] == 1 and found["n"] == 3


def test_a_small_group_stops_nothing(connection: duckdb.DuckDBPyConnection) -> None:
    rows = connection.execute(
        "SELECT i = 3, bootstrap_units(x, unit), bootstrap_blocks(x, i) "
        "FROM (SELECT i, i % 7 AS x, i % 5 AS unit FROM range(51) t(i)) GROUP BY 1 ORDER BY 1"
    ).fetchall()
    assert rows[0][1]["n"] == rows[0][2]["n"] == 50
    assert rows[1][1:] == (None, None)


def test_null_nan_and_infinite(connection: duckdb.DuckDBPyConnection) -> None:
    call = "bootstrap_units(x::DOUBLE, unit, {}, resamples := 200)"
    rows = ", ".join(f"({i * i % 11}, {i % 6})" for i in range(30))
    for statistic in ("'mean'", "'median'", "'sd'"):
        plain = one(connection, call.format(statistic), rows)
        gapped = rows + ", (NULL, 3), (7, NULL), (NULL, NULL)"
        assert bits(one(connection, call.format(statistic), gapped)) == bits(plain)
        spoilt = one(connection, call.format(statistic), rows + ", ('NaN'::DOUBLE, 2)")
        assert all(math.isnan(spoilt[name]) for name in ("estimate", "lower", "upper", "se"))
        assert (spoilt["n"], spoilt["n_units"]) == (31, 6)
    wild = one(connection, call.format("'median'"), rows + ", ('inf'::DOUBLE, 2)")
    assert math.isfinite(wild["upper"])
    wild = one(connection, call.format("'mean'"), rows + ", ('inf'::DOUBLE, 2)")
    assert wild["estimate"] == math.inf and wild["upper"] == math.inf


@pytest.mark.parametrize("value", [0.1, -7.3, 1e9 + 0.1, 1e300, 0.0])
def test_equal_values_give_an_interval_of_no_width(
    connection: duckdb.DuckDBPyConnection, value: float
) -> None:
    for method in ("percentile", "basic", "normal", "bca"):
        for statistic in ("mean", "trimmed_mean(0.2)", "winsorized_mean(0.1)", "median", "trimean"):
            (found,) = connection.execute(  # type: ignore[misc]
                f"SELECT bootstrap_units({value!r}::DOUBLE, i % 4, '{statistic}', "
                f"method := '{method}', resamples := 99) FROM range(13) t(i)"
            ).fetchone()
            assert found["lower"] == found["upper"] == found["estimate"] == value
            assert found["se"] == found["bias"] == 0.0


def test_estimates_are_the_functions_own(connection: duckdb.DuckDBPyConnection) -> None:
    (unequal,) = connection.execute(  # type: ignore[misc]
        "SELECT count(*) FROM (SELECT bootstrap_units(x, unit, 'trimmed_mean(0.1)').estimate AS a, "
        "bootstrap_blocks(x, visit, 2, 'qn_scale', resamples := 9).estimate AS c, "
        "trimmed_mean(x, 0.1) FILTER (unit IS NOT NULL) AS b, qn_scale(x) AS d "
        f"FROM ({READINGS.replace('12000', '600')}) WHERE unit IS NOT NULL GROUP BY stop) "
        "WHERE a <> b OR c <> d".replace(" FILTER (unit IS NOT NULL)", "")
    ).fetchone()
    assert unequal == 0


def test_gaps_in_position_do_not_count(connection: duckdb.DuckDBPyConnection) -> None:
    positions = ("i", "i * i", "TIMESTAMP '2031-01-01' + INTERVAL (i * i) HOUR", "-1.0 / (i + 1)")
    calls = ", ".join(f"bootstrap_blocks(x, {at}, resamples := 200)" for at in positions)
    row = connection.execute(
        f"SELECT {calls} FROM (SELECT i, (i * i) % 41 + i // 9 AS x FROM range(90) t(i))"
    ).fetchone()
    assert row is not None
    assert all(bits(found) == bits(row[0]) for found in row)


def test_parameters_may_differ_by_group(connection: duckdb.DuckDBPyConnection) -> None:
    source = (
        "(SELECT i // 100 AS g, hash(i) % 50 AS x, i % 8 AS unit, "
        "CASE WHEN i < 100 THEN 'mean' ELSE 'median' END AS s, "
        "CASE WHEN i < 100 THEN 0.5 ELSE 0.9 END AS c, 100 + i // 100 AS r FROM range(200) t(i))"
    )
    together = connection.execute(
        "SELECT bootstrap_units(x, unit, any_value(s), any_value(c), resamples := any_value(r), "
        f"seed := any_value(g)) FROM {source} GROUP BY g ORDER BY g"
    ).fetchall()
    for g, (statistic, confidence) in enumerate((("mean", 0.5), ("median", 0.9))):
        alone = connection.execute(
            f"SELECT bootstrap_units(x, unit, '{statistic}', {confidence}, "
            f"resamples := {100 + g}, seed := {g}) FROM {source} WHERE g = {g}"
        ).fetchall()
        assert bits(alone[0]) == bits(together[g])


WRONG = {
    "bootstrap_units(x, unit, confidence := 1.5)": (
        "bootstrap_units: confidence must be a number above 0 and below 1, got 1.5;"
    ),
    "bootstrap_units(x, unit, resamples := 0)": (
        "bootstrap_units: resamples must be a whole number from 1 to 1e+06, got 0;"
    ),
    "bootstrap_units(x, unit, method := 'studentized')": (
        "bootstrap_units: method must be 'percentile', 'basic', 'normal' or 'bca', "
        "got 'studentized';"
    ),
    "bootstrap_units(x, unit, 'middle')": "bootstrap_units: statistic must be one of mean, ",
    "bootstrap_units(x, [unit])": "bootstrap_units: unit must be a number, text or date, not ",
    "bootstrap_blocks(x, unit)": (
        "bootstrap_blocks: position must not repeat within a group, got 0 twice;"
    ),
    "bootstrap_blocks(x, i, 0)": "bootstrap_blocks: block must be a whole number from 1 to 1e+09",
    "bootstrap_blocks(x, i, 2.5)": "bootstrap_blocks: block must be a whole number from 1 to",
    "bootstrap_blocks(x, i, method := 'bca')": (
        "bootstrap_blocks: method must be 'percentile', 'basic' or 'normal', got 'bca';"
    ),
}


@pytest.mark.parametrize("call", WRONG)
def test_one_sentence_when_something_is_wrong(
    connection: duckdb.DuckDBPyConnection, call: str
) -> None:
    said = complaint(
        connection, f"SELECT {call} FROM (SELECT i, i * i AS x, i % 5 AS unit FROM range(20) t(i))"
    )
    assert said.startswith(WRONG[call])


@pytest.mark.parametrize("statistic", ["trimmed_mean(0.2)", "qn_scale"])
def test_stops_within_one_large_group(statistic: str) -> None:
    """The counter moves while one group is resampled, and a stop ends the query."""
    control = Control()
    with duckdb.connect(config={"threads": 2}) as connection:
        register(connection, control=control)
        warm = f"SELECT bootstrap_blocks(i % 7, i, 3, '{statistic}') FROM range(50) t(i)"
        connection.execute(warm).fetchall()
        before = control.done
        counts: list[int] = []

        def watch() -> None:
            deadline = time.monotonic() + 60
            while len(set(counts)) < 4 and time.monotonic() < deadline:
                counts.append(control.done)
                time.sleep(0.02)
            control.stop()

        watcher = threading.Thread(target=watch)
        watcher.start()
        with pytest.raises(duckdb.Error, match="stopped"):
            connection.execute(
                f"SELECT bootstrap_blocks(hash(i) % 1009, i, 30, '{statistic}', "
                "resamples := 1000000) FROM range(200000) t(i)"
            ).fetchall()
        watcher.join()
        control.reset()
        assert counts[-1] > before and len(set(counts)) >= 4


def test_coverage_by_number_of_units(connection: duckdb.DuckDBPyConnection) -> None:
    """95 % intervals of the mean, units and rows normal: about 84, 91, 93 % at 5, 10, 20 units.

    Fixed seeds, 600 data sets: a standard error of 1.5 points at most.
    """
    generator = np.random.default_rng(8)
    for units, expected in ((5, 0.84), (10, 0.905), (20, 0.925)):
        shape = (600, units, 4)
        x = generator.normal(0.0, 1.0, (600, units, 1)) + generator.normal(0.0, 1.0, shape)
        owner = np.broadcast_to(np.arange(units)[:, np.newaxis], shape)
        group = np.broadcast_to(np.arange(600)[:, np.newaxis, np.newaxis], shape)
        connection.register(
            "sets", pa.table({"g": group.ravel(), "u": owner.ravel(), "x": x.ravel()})
        )
        rows = connection.execute(
            "SELECT r.lower <= 0 AND r.upper >= 0 FROM (SELECT bootstrap_units(x, u, 'mean', "
            "resamples := 999) AS r FROM sets GROUP BY g)"
        ).fetchall()
        connection.unregister("sets")
        assert abs(np.mean(rows) - expected) < 0.045


def test_unit_intervals(larkmoor: duckdb.DuckDBPyConnection) -> None:
    call = "unit_intervals('visits', 'dwell_s', {}, by := 'route', seed := 3{})"
    rows = answer(larkmoor, "FROM " + call.format("'visit'", ", statistic := 'median'"))
    assert [row["route"] for row in rows] == ["R0", "R1", "R2"]
    expected = answer(
        larkmoor,
        "SELECT route, unnest(bootstrap_units(dwell_s, visit, 'median', seed := 3)) "
        "FROM visits GROUP BY route ORDER BY route",
    )
    for row, wanted in zip(rows, expected, strict=True):
        assert row.pop("note") is None
        assert bits(row) == bits(wanted)
    few = answer(larkmoor, "FROM " + call.format("'day'", ""))
    assert [row["n_units"] for row in few] == [5, 5, 5]
    assert all("5 units: covers too rarely" in row["note"] for row in few)
    assert all("84, 91, 93 %" in row["note"] for row in few)
    (single,) = answer(
        larkmoor,
        "FROM unit_intervals('(SELECT 1 AS unit, i AS x FROM range(4) t(i))', 'x', 'unit')",
    )
    assert single["lower"] is None and (single["n"], single["n_units"]) == (4, 1)
    assert single["note"].startswith("one unit")


def test_unit_intervals_refuses(larkmoor: duckdb.DuckDBPyConnection) -> None:
    call = "FROM unit_intervals('visits', 'dwell_s', 'visit'{})"
    for more, sentence in {
        ", confidence := 1.5": "unit_intervals: confidence must be a number above 0 and below 1",
        ", resamples := 'many'": "unit_intervals: resamples must be a whole number from 1 to 1e+06",
        ", method := 'exact'": "unit_intervals: method must be 'percentile', 'basic', 'normal'",
        ", statistic := 'middle'": "unit_intervals: statistic must be one of mean, median, sd",
        ", by := 'note'": "unit_intervals: by names note, which is also a column of the result",
    }.items():
        assert complaint(larkmoor, call.format(more)).startswith(sentence)
    wrong = complaint(larkmoor, "FROM unit_intervals('visits', 'route', 'visit')")
    assert wrong.startswith("unit_intervals: route must be a number")
