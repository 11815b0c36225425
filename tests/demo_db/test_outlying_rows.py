"""The rounded stop, the stuck clocks and the layovers are found; clean dwell times are quiet."""

import duckdb
import pytest

from midspread.demo_db import truth
from midspread.udfs import register

Connection = duckdb.DuckDBPyConnection
STUCK = ("stuck at zero", "stuck open")
KEYS = "by := ['route', 'day_part', 'payment']"


@pytest.fixture(scope="module")
def equipped(truth_connection: Connection) -> Connection:
    register(truth_connection)
    return truth_connection


def test_the_rounded_stop_is_the_one_on_a_coarse_grid(equipped: Connection) -> None:
    rows = equipped.execute(
        "SELECT stop, step, on_step, error_in_scales, note, tied "
        "FROM heaping('visits', 'dwell_s', by := 'stop')"
    ).fetchall()
    assert len(rows) == sum(route.stops for route in truth.ROUTES)
    by_stop = {row[0]: row[1:] for row in rows}
    step, on_step, error, note, tied = by_stop.pop(truth.ROUNDED_STOP)
    assert step == truth.ROUNDING_STEP_S
    assert on_step > 0.98 and tied > 0.95
    assert error > 0.1 and "jumps" in note
    assert {row[0] for row in by_stop.values()} == {truth.CLOCK_STEP_S}
    assert all("jumps" not in row[3] for row in by_stop.values())


def test_clean_times_are_all_on_the_clocks_grid(equipped: Connection) -> None:
    steps = equipped.execute(
        "SELECT DISTINCT step FROM heaping('visits', 'clean_dwell_s', by := 'stop')"
    ).fetchall()
    assert steps == [(truth.CLOCK_STEP_S,)]


def shares(connection: Connection, table: str, value: str, more: str) -> dict[str, float]:
    """Of each kind of fault the share of rows flagged."""
    return dict(
        connection.execute(
            "SELECT coalesce(fault, 'none'), avg(CAST(outside AS INTEGER)) "
            f"FROM row_flags('{table}', '{value}', {KEYS}{more}) GROUP BY ALL"
        ).fetchall()
    )


def test_stuck_clocks_and_layovers_are_flagged_on_the_log_scale(equipped: Connection) -> None:
    """A stuck clock at zero has no logarithm: it is found as a zero, the others as outside."""
    logs = "(SELECT *, ln(dwell_s) AS log_s FROM visits WHERE dwell_s > 0)"
    quoted = logs.replace("'", "''")
    for rule in ("fences", "median_mad"):
        found = shares(equipped, quoted, "log_s", f", rule := '{rule}'")
        assert found["stuck open"] == 1.0
        assert found["layover"] > 0.95
        assert found["none"] < 0.012
        # Wrong values that look usual are not outside: flags are no proof of health.
        assert found["drift"] < 0.1


def test_clean_times_raise_no_more_alarms_than_stated(equipped: Connection) -> None:
    """The rates for normal data in the help: 0.7 to 1.6 per cent by fences, 0.3 to 1.4 by MAD."""
    logs = "(SELECT *, ln(clean_dwell_s) AS log_s FROM visits WHERE clean_dwell_s > 0)"
    for rule, low, high in (("fences", 0.006, 0.016), ("median_mad", 0.0025, 0.014)):
        ((share,),) = equipped.execute(
            "SELECT avg(CAST(outside AS INTEGER)) FROM "
            f"row_flags('{logs}', 'log_s', {KEYS}, rule := '{rule}')"
        ).fetchall()
        assert low < share < high


def test_on_its_own_scale_skewness_makes_alarms_that_adjusted_fences_lower(
    equipped: Connection,
) -> None:
    plain = shares(equipped, "visits", "clean_dwell_s", ", rule := 'fences'")["none"]
    adjusted = shares(equipped, "visits", "clean_dwell_s", ", rule := 'adjusted_fences'")["none"]
    assert 0.03 < plain < 0.05
    assert adjusted < 0.7 * plain
    found = shares(equipped, "visits", "dwell_s", "")
    assert found["stuck open"] == 1.0


def test_stuck_clocks_stand_out_along_a_vehicles_day(equipped: Connection) -> None:
    """Spells of one day part flagged against the vehicle's visits before and after."""
    found = dict(
        equipped.execute(
            """SELECT coalesce(fault, 'none'), avg(CAST(outside AS INTEGER))
            FROM rolling_flags('visits', 'dwell_s', 'visit', by := 'vehicle', half_width := 15)
            GROUP BY ALL"""
        ).fetchall()
    )
    assert found["stuck open"] > 0.99
    assert found["layover"] > 0.95
    clean = equipped.execute(
        """SELECT avg(CAST(outside AS INTEGER)) FROM rolling_flags(
            '(SELECT *, ln(clean_dwell_s) AS log_s FROM visits WHERE clean_dwell_s > 0)',
            'log_s', 'visit', by := 'vehicle', half_width := 15)"""
    ).fetchall()[0][0]
    assert clean < 0.012  # the help's figures for windows of this width: 0.7 to 1.4 per cent
    assert found["none"] < 0.06
