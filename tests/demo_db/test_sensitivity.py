"""What leaving out vehicles and visits finds in Larkmoor's year."""

import duckdb
import pytest

from midspread.demo_db import truth
from midspread.udfs import register

Connection = duckdb.DuckDBPyConnection


@pytest.fixture(scope="module")
def equipped(truth_connection: Connection) -> Connection:
    register(truth_connection)
    return truth_connection


def first_vehicles(connection: Connection, column: str, least: float) -> set[str]:
    """Vehicles that come first on a route and stand at least so many spreads apart."""
    rows = connection.execute(
        f"SELECT unit FROM leave_one_out('visits', '{column}', 'vehicle', by := 'route') "
        f"WHERE rank = 1 AND change_in_spreads < -{least}"
    ).fetchall()
    return {unit for (unit,) in rows}


def test_the_drifting_vehicle_is_named(equipped: Connection) -> None:
    """On the routes of its own depot it moves the trimmed mean most; in clean data it does not."""
    ((route, change),) = equipped.execute(
        "SELECT route, change FROM leave_one_out('visits', 'dwell_s', 'vehicle', by := 'route') "
        "ORDER BY change_in_spreads LIMIT 1"
    ).fetchall()
    assert change < 0 and truth.ROUTE_BY_CODE[route].depot == "Fell Yard"
    assert truth.DRIFTING_VEHICLE in first_vehicles(equipped, "dwell_s", 4.0)
    assert truth.DRIFTING_VEHICLE not in first_vehicles(equipped, "clean_dwell_s", 4.0)


def test_stuck_clocks_move_the_mean_most(equipped: Connection) -> None:
    rows = equipped.execute(
        "SELECT route, lowest, highest FROM influential_values('visits', 'dwell_s', "
        "by := 'route', statistic := 'mean', top := 3)"
    ).fetchall()
    assert len(rows) == 3 * len(truth.ROUTES)
    for route, lowest, highest in rows:
        faults = equipped.execute(
            "SELECT DISTINCT fault FROM visits WHERE route = ? AND dwell_s BETWEEN ? AND ?",
            [route, lowest, highest],
        ).fetchall()
        assert faults == [("stuck open",)]


def test_trimmed_means_hide_them(equipped: Connection) -> None:
    """A stuck clock moves the mean of its route, and the trimmed mean next to nothing."""
    moved = {
        statistic: max(
            abs(change)
            for (change,) in equipped.execute(
                "SELECT change FROM influential_values('visits', 'dwell_s', by := 'route', "
                f"statistic := '{statistic}', top := 1)"
            ).fetchall()
        )
        for statistic in ("mean", "trimmed_mean(0.2)")
    }
    assert moved["mean"] > 100 * moved["trimmed_mean(0.2)"]
