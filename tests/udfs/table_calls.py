"""Calls of every table function, and what comes back."""

from typing import Any

import duckdb
import pytest

CALLS = {
    "unit_intervals": "unit_intervals({}, 'dwell_s', 'dwell_s', resamples := 99{})",
    "robust_summary": "robust_summary({}, 'dwell_s'{})",
    "heaping": "heaping({}, 'dwell_s'{})",
    "trim_path": "trim_path({}, 'dwell_s'{})",
    "location_estimates": "location_estimates({}, 'dwell_s', resamples := 20{})",
    "leave_one_out": "leave_one_out({}, 'dwell_s', 'ramp_used'{})",
    "influential_values": "influential_values({}, 'dwell_s'{})",
    "held_out_errors": "held_out_errors({}, 'dwell_s'{})",
    "power_ladder": "power_ladder({}, 'dwell_s'{})",
    "group_differences": "group_differences({}, 'dwell_s', 'ramp_used'{})",
    "straightening_pairs": "straightening_pairs({}, 'dwell_s', 'dwell_s'{})",
    "spread_by_level": "spread_by_level({}, 'dwell_s', 'ramp_used'{})",
    "choices_table": "choices_table({}, 'dwell_s', 'ramp_used', shuffles := 9{})",
    "rows_to_reverse": "rows_to_reverse({}, 'dwell_s', 'ramp_used'{})",
    "bootstrap_draws": "bootstrap_draws({}, 'dwell_s', resamples := 20{})",
    "value_profile": "value_profile({}, columns := 'dwell_s'{})",
}
EVERY = pytest.mark.parametrize("function", CALLS)
# Whole rows come back, in no set order.
ROW_CALLS = {
    "row_flags": "(SELECT * FROM row_flags({}, 'dwell_s'{}) ORDER BY visit)",
    "rolling_flags": "(SELECT * FROM rolling_flags({}, 'dwell_s', 'visit'{}) ORDER BY visit)",
}
ALL_CALLS = {**CALLS, **ROW_CALLS}
EVERY_TABLE = pytest.mark.parametrize("function", ALL_CALLS)


def answer(connection: duckdb.DuckDBPyConnection, sql: str) -> list[dict[str, Any]]:
    result = connection.execute(sql)
    names = [column[0] for column in result.description or []]
    return [dict(zip(names, row, strict=True)) for row in result.fetchall()]


def complaint(connection: duckdb.DuckDBPyConnection, sql: str) -> str:
    """The sentence of ours in the engine's error: its first line, without the engine's prefix."""
    with pytest.raises(duckdb.Error) as caught:
        connection.execute(sql).fetchall()
    line = str(caught.value).split("\n")[0]
    for prefix in (
        "Invalid Input Error: ",
        "Python exception occurred while executing the UDF: ",
        "ParameterError: ",
    ):
        line = line.removeprefix(prefix)
    return line


def profile(connection: duckdb.DuckDBPyConnection, values: str, more: str = "") -> dict[str, Any]:
    """The profile of one column, given as an SQL list."""
    connection.execute(f"CREATE OR REPLACE TEMP TABLE one AS SELECT unnest({values}) AS v")
    (row,) = answer(connection, f"FROM value_profile('one'{more})")
    return row
