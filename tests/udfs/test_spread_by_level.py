"""`spread_by_level`: the power that evens the spread, labels left out, keys, bad input."""

import math
from typing import Any

import duckdb
import numpy as np
import pyarrow as pa
import pytest

from tests.udfs.table_calls import answer, complaint


def labelled(
    connection: duckdb.DuckDBPyConnection, groups: dict[str | None, Any]
) -> list[dict[str, Any]]:
    """The rows for labels with their values."""
    rows = [(label, value) for label, values in groups.items() for value in values]
    table = pa.table(
        {
            "route": pa.array([row[0] for row in rows], pa.string()),
            "v": pa.array([row[1] for row in rows], pa.float64()),
        }
    )
    connection.register("given_labels", table)
    try:
        return answer(connection, "FROM spread_by_level('given_labels', 'v', 'route')")
    finally:
        connection.unregister("given_labels")


@pytest.mark.parametrize("power", [-1.0, 0.0, 0.5, 1.0])
def test_the_power_that_made_the_spreads_equal_is_found(
    connection: duckdb.DuckDBPyConnection, generator: np.random.Generator, power: float
) -> None:
    """Values that spread alike on one rung, seen on another; one in fifty wild."""
    groups = {}
    for step in range(12):
        even = 5.0 + step + generator.normal(0.0, 0.25, 4000)
        x = np.exp(even / 3) if power == 0 else (even if power > 0 else 25 - even) ** (1 / power)
        x[::50] = 100 * x.max()
        groups[f"R{step}"] = x
    rows = labelled(connection, groups)
    assert {(row["n_labels"], row["n_left_out"]) for row in rows} == {(12, 0)}
    assert {row["suggested_rung"] for row in rows} == {power}
    assert rows[0]["power"] == pytest.approx(power, abs=0.12)
    assert rows[0]["power"] == 1 - rows[0]["slope"]
    levels = [row["level"] for row in rows]
    assert levels == sorted(levels)


def test_figures_by_their_definitions(
    connection: duckdb.DuckDBPyConnection, generator: np.random.Generator
) -> None:
    groups = {f"R{g}": np.round(generator.gamma(2 + g, 5, 20 + 3 * g), 1) for g in range(7)}
    rows = labelled(connection, groups)
    assert len(rows) == 7
    for row in rows:
        x = np.sort(groups[row["label"]])
        half = (x.size + 1) // 2
        spread = np.median(x[-half:]) - np.median(x[:half])
        assert row["n"] == x.size
        assert row["level"] == pytest.approx(np.median(x), rel=1e-15)
        assert row["spread"] == pytest.approx(spread, rel=1e-12)
        assert row["ln_level"] == pytest.approx(math.log(np.median(x)), rel=1e-14)
        assert row["ln_spread"] == pytest.approx(math.log(spread), rel=1e-12)
    (line,) = connection.execute(
        "SELECT resistant_line(s, l).slope FROM (SELECT unnest(?) AS s, unnest(?) AS l)",
        [[row["ln_spread"] for row in rows], [row["ln_level"] for row in rows]],
    ).fetchall()
    assert {row["slope"] for row in rows} == {line[0]}


def test_labels_that_have_no_logarithms_are_counted(
    connection: duckdb.DuckDBPyConnection,
) -> None:
    fine = {"a": [1.0, 2.0, 3.0, 4.0], "b": [10.0, 20.0, 30.0, 40.0]}
    odd = {
        "flat": [5.0] * 4,
        "below": [-4.0, -2.0, -1.0],
        "spoilt": [1.0, math.nan, 3.0],
        "endless": [math.inf] * 3,
    }
    rows = labelled(connection, {**fine, **odd, "empty": [None], None: [1.0, 7.0]})
    by_label = {row["label"]: row for row in rows}
    assert set(by_label) == {*fine, *odd, "empty"}
    for row in rows:
        assert (row["n_labels"], row["n_left_out"]) == (6, 4)
        assert row["slope"] == pytest.approx(1.0, rel=1e-14)
        assert row["suggested_rung"] == 0.0
        assert (row["ln_level"] is None) == (row["ln_spread"] is None) == (row["label"] not in fine)
    assert by_label["empty"]["level"] is None and by_label["empty"]["n"] == 0
    assert math.isnan(by_label["spoilt"]["level"])
    (alone,) = labelled(connection, {"a": [1.0, 2.0, 3.0]})
    assert alone["slope"] is alone["power"] is alone["suggested_rung"] is None


def test_suggested_rungs(connection: duckdb.DuckDBPyConnection) -> None:
    """Two labels of levels 1 and e: spreads in the ratio e^slope."""
    for power, rung in ((-2.6, -3), (-2.4, -2), (-1, -1), (-0.3, -0.5), (-0.2, 0), (0.2, 0)):
        assert suggested(connection, power) == rung
    for power, rung in ((0.3, 0.5), (0.7, 0.5), (0.8, 1), (1.4, 1), (1.6, 2), (2.6, 3), (9, 3)):
        assert suggested(connection, power) == rung


def suggested(connection: duckdb.DuckDBPyConnection, power: float) -> float:
    groups: dict[str | None, Any] = {}
    for level in (1.0, math.e):
        reach = 0.05 * level ** (1 - power)
        groups[f"{level:.1f}"] = [level - reach, level, level + reach]
    rows = labelled(connection, groups)
    assert rows[0]["power"] == pytest.approx(power, abs=1e-9)
    return float(rows[0]["suggested_rung"])


def test_each_group_has_a_line_of_its_own(larkmoor: duckdb.DuckDBPyConnection) -> None:
    rows = answer(larkmoor, "FROM spread_by_level('visits', 'dwell_s', 'stop', by := ['route'])")
    assert list(rows[0])[:2] == ["route", "label"]
    for route in ("R0", "R1", "R2"):
        alone = answer(
            larkmoor,
            f"FROM spread_by_level('(FROM visits WHERE route = ''{route}'')', 'dwell_s', 'stop')",
        )
        own = [row for row in rows if row["route"] == route]
        assert [{k: v for k, v in row.items() if k != "route"} for row in own] == alone


def test_bad_names(larkmoor: duckdb.DuckDBPyConnection) -> None:
    call = "FROM spread_by_level('visits', 'dwell_s', {})"
    said = complaint(larkmoor, call.format("'route', by := ['route', 'route']"))
    assert said.startswith("spread_by_level: by names route twice")
    rows = answer(larkmoor, call.format("'route', by := 'route'"))
    assert [(row["route"], row["label"]) for row in rows] == [(r, r) for r in ("R0", "R1", "R2")]
    said = complaint(larkmoor, call.format("NULL"))
    assert said.startswith("spread_by_level: label must be the name of a column")
