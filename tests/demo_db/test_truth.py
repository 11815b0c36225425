"""The visits are what `truth` says: distributions, shares of contamination, effects, joins.

Tolerances are five standard errors of the sample size at hand (common practice, no source): the
data never change, so a test that passes passes for good.
"""

import datetime as dt
import math
from statistics import NormalDist
from typing import Any

import duckdb
import pytest

from midspread.demo_db import truth

Connection = duckdb.DuckDBPyConnection
ROUTES = [route.route for route in truth.ROUTES]


def one_row(connection: Connection, query: str) -> tuple[Any, ...]:
    row = connection.execute(query).fetchone()
    assert row is not None
    return row


def five_errors_of_share(share: float, n: int) -> float:
    return 5 * math.sqrt(share * (1 - share) / n)


@pytest.fixture(scope="module")
def scored(truth_connection: Connection) -> Connection:
    """The view `scored`: each clean dwell as the normal score that its cell's truth gives it."""
    cells = ", ".join(
        f"('{route}', '{part.name}', '{payment}', "
        f"{truth.median_s(route, part.name, payment)!r}::DOUBLE, "
        f"{truth.ROUTE_BY_CODE[route].log_spread!r}::DOUBLE)"
        for route in ROUTES
        for part in truth.DAY_PARTS
        for payment in (truth.CASH_BOX, truth.TAP_READER)
    )
    truth_connection.execute(
        "CREATE OR REPLACE TEMP VIEW scored AS SELECT *, ln(clean_dwell_s / median_s) / log_spread "
        f"AS z FROM visits JOIN (VALUES {cells}) "
        "AS cells(route, day_part, payment, median_s, log_spread) USING (route, day_part, payment)"
    )
    return truth_connection


def test_clean_dwell_is_log_normal_with_the_stated_medians(scored: Connection) -> None:
    n, mean, sd, worst = one_row(
        scored,
        "SELECT count(*), avg(z), stddev(z), (SELECT max(abs(avg_z) * sqrt(n)) FROM "
        "(SELECT avg(z) AS avg_z, count(*) AS n FROM scored GROUP BY route, day_part, payment)) "
        "FROM scored",
    )
    assert abs(mean) < 5 / math.sqrt(n)
    assert abs(sd - 1) < 5 / math.sqrt(2 * n)
    assert worst < 5, "every cell's mean score within five standard errors of 0"
    for prob in (0.01, 0.1, 0.25, 0.5, 0.75, 0.9, 0.99):
        z = NormalDist().inv_cdf(prob)
        (below,) = one_row(scored, f"SELECT avg((z < {z})::INTEGER) FROM scored")
        assert abs(below - prob) < five_errors_of_share(prob, n), prob


def test_closed_forms_of_truth_agree_with_each_other_and_the_clean_data(
    scored: Connection,
) -> None:
    cell = ("L11", "midday", truth.CASH_BOX)
    assert truth.quantile_s(0.5, *cell) == pytest.approx(truth.median_s(*cell), rel=1e-14)
    # the trimmed mean as the average of the quantiles it keeps, by the midpoint rule
    steps = 20_000
    for share in (0.0, 0.1, 0.2, 0.4):
        kept = 1 - 2 * share
        probs = (share + kept * (step + 0.5) / steps for step in range(steps))
        average = sum(truth.quantile_s(prob, *cell) for prob in probs) / steps
        assert truth.trimmed_mean_s(share, *cell) == pytest.approx(average, rel=2e-4)
    n, mean = one_row(
        scored,
        "SELECT count(*), avg(clean_dwell_s) FROM scored "
        "WHERE (route, day_part, payment) = ('L11', 'midday', 'cash box')",
    )
    spread = truth.ROUTE_BY_CODE["L11"].log_spread
    error = mean / truth.trimmed_mean_s(0, *cell) - 1
    assert abs(error) < 5 * math.sqrt(math.expm1(spread**2) / n)


@pytest.mark.parametrize("payment", [truth.CASH_BOX, truth.TAP_READER])
def test_share_of_stuck_spells(truth_connection: Connection, payment: str) -> None:
    last = truth.FIRST_DAY + dt.timedelta(truth.DAYS_IN_YEAR)
    with_cash_box = sum(
        ((bus.reader_fitted or last) - truth.FIRST_DAY).days for bus in truth.VEHICLES
    )
    with_reader = len(truth.VEHICLES) * truth.DAYS_IN_YEAR - with_cash_box
    days = with_cash_box if payment == truth.CASH_BOX else with_reader
    spells = days * len(truth.DAY_PARTS)
    at_zero, stuck_open = one_row(
        truth_connection,
        "SELECT count_if(kind = 'stuck at zero'), count_if(kind = 'stuck open') "
        "FROM larkmoor_stuck_spell JOIN warehouse.vehicles USING (vehicle) "
        f"WHERE coalesce(day >= reader_fitted, false) = ('{payment}' = 'tap reader')",
    )
    share = truth.STUCK_SHARE[payment]
    for got, stated in (
        (at_zero / spells, share * truth.STUCK_AT_ZERO_PART),
        (stuck_open / spells, share * (1 - truth.STUCK_AT_ZERO_PART)),
    ):
        assert abs(got - stated) < five_errors_of_share(stated, spells) < stated / 2


def test_share_of_stuck_visits(truth_connection: Connection) -> None:
    rows = truth_connection.execute(
        "SELECT payment, count(*), avg((dwell_s = 0)::INTEGER), avg((dwell_s > 3600)::INTEGER) "
        "FROM visits WHERE dwell_s IS NOT NULL AND stop <> 'L6-08' GROUP BY payment"
    ).fetchall()
    assert len(rows) == 2
    for payment, n, at_zero, stuck_open in rows:
        for got, part in (
            (at_zero, truth.STUCK_AT_ZERO_PART),
            (stuck_open, 1 - truth.STUCK_AT_ZERO_PART),
        ):
            stated = truth.STUCK_SHARE[payment] * part
            # spells of more than one visit make the share vary a little more
            assert abs(got - stated) < 1.5 * five_errors_of_share(stated, n)


def test_faults_strike_whatever_the_dwell(scored: Connection) -> None:
    rows = scored.execute("SELECT fault, avg(z), count(*) FROM scored GROUP BY fault").fetchall()
    assert {fault for fault, *_ in rows} == {
        *(None, "missing", "stuck at zero", "stuck open", "layover", "drift", "rounded"),
    }
    for fault, mean, n in rows:
        assert abs(mean) < 5 / math.sqrt(n), fault


def test_stuck_open_values(truth_connection: Connection) -> None:
    lowest, highest, at_ceiling = one_row(
        truth_connection,
        "SELECT min(dwell_s), max(dwell_s), avg((dwell_s = max_s)::INTEGER) FROM visits, "
        "(SELECT max(dwell_s) AS max_s FROM visits) WHERE fault = 'stuck open'",
    )
    assert lowest > truth.STUCK_OPEN_MIN_S
    assert highest == truth.CLOCK_CEILING_S
    beyond = truth.STUCK_OPEN_MIN_S + truth.STUCK_OPEN_RANGE_S - truth.CLOCK_CEILING_S
    assert at_ceiling == pytest.approx(beyond / truth.STUCK_OPEN_RANGE_S, abs=0.15)


def test_a_stuck_clock_stays_stuck_for_its_spell(truth_connection: Connection) -> None:
    mixed, spells = one_row(
        truth_connection,
        "SELECT count_if(kinds > 1), count(*) FROM (SELECT "
        "count(DISTINCT coalesce(if(fault LIKE 'stuck%', fault, 'runs'), 'runs')) AS kinds FROM "
        "(SELECT * FROM visits WHERE fault IS DISTINCT FROM 'missing') "
        "GROUP BY vehicle, day, day_part HAVING count_if(fault LIKE 'stuck%') > 0)",
    )
    assert spells > 100 and mixed == 0


def test_nothing_else_runs_past_an_hour_or_stands_at_zero(truth_connection: Connection) -> None:
    (strange,) = one_row(
        truth_connection,
        "SELECT count(*) FROM visits WHERE (fault IS NULL OR fault NOT LIKE 'stuck%') "
        "AND (dwell_s <= 0 OR dwell_s > 1500)",
    )
    assert strange == 0


def test_missing_values(truth_connection: Connection) -> None:
    n, missing, marked = one_row(
        truth_connection,
        "SELECT count(*), avg((dwell_s IS NULL)::INTEGER), "
        "count_if((dwell_s IS NULL) <> (fault IS NOT DISTINCT FROM 'missing')) FROM visits",
    )
    assert abs(missing - truth.MISSING_SHARE) < five_errors_of_share(truth.MISSING_SHARE, n)
    assert marked == 0


@pytest.mark.parametrize("route", ROUTES)
def test_layovers_stand_at_the_end_stops_in_the_stated_share(
    truth_connection: Connection, route: str
) -> None:
    n_end, share_end, elsewhere, n, share = one_row(
        truth_connection,
        "SELECT count_if(is_end_stop), "
        "count_if(is_end_stop AND is_layover) / count_if(is_end_stop), "
        "count_if(NOT is_end_stop AND is_layover), count(*), avg(is_layover::INTEGER) "
        "FROM (SELECT stops.is_end_stop, coalesce(fault = 'layover', false) AS is_layover "
        f"FROM visits JOIN warehouse.stops USING (stop) WHERE visits.route = '{route}')",
    )
    stated = truth.ROUTE_BY_CODE[route].layover_share
    # a layover shows unless the clock stuck or the value is missing: about 1 in 100
    assert abs(share_end - stated) < five_errors_of_share(stated, n_end) + 0.02 * stated
    assert elsewhere == 0
    stated = truth.layover_share(route)
    assert abs(share - stated) < five_errors_of_share(stated, n) + 0.02 * stated


def test_layovers_add_some_hundreds_of_seconds(truth_connection: Connection) -> None:
    least, most = one_row(
        truth_connection,
        "SELECT min(dwell_s - clean_dwell_s), max(dwell_s - clean_dwell_s) "
        f"FROM visits WHERE fault = 'layover' AND vehicle <> '{truth.DRIFTING_VEHICLE}' "
        f"AND stop <> '{truth.ROUNDED_STOP}'",
    )
    step = truth.CLOCK_STEP_S
    assert truth.LAYOVER_MIN_S - step <= least < most <= truth.LAYOVER_MAX_S + step
    assert most - least > 0.9 * (truth.LAYOVER_MAX_S - truth.LAYOVER_MIN_S)


def test_one_vehicle_drifts_in_line_with_the_day(truth_connection: Connection) -> None:
    rows = truth_connection.execute(
        "SELECT vehicle, day, dwell_s - clean_dwell_s FROM visits WHERE fault = 'drift' "
        f"AND stop <> '{truth.ROUNDED_STOP}'"
    ).fetchall()
    assert {vehicle for vehicle, *_ in rows} == {truth.DRIFTING_VEHICLE}
    assert len(rows) > 300
    assert all(abs(lag - truth.drift_s(day)) <= 0.1 + 1e-9 for _, day, lag in rows)
    assert truth.drift_s(dt.date(2031, 1, 1)) == 0
    assert truth.drift_s(dt.date(2031, 12, 31)) == pytest.approx(truth.DRIFT_S_PER_YEAR, rel=0.01)


def test_every_other_value_is_the_clean_one(truth_connection: Connection) -> None:
    (changed,) = one_row(
        truth_connection,
        "SELECT count(*) FROM visits WHERE fault IS NULL AND dwell_s <> clean_dwell_s",
    )
    assert changed == 0


def test_one_stop_is_rounded_to_5_s(truth_connection: Connection) -> None:
    rows = truth_connection.execute(
        "SELECT stop, avg((dwell_s % 5 = 0)::INTEGER) FROM visits "
        "WHERE fault IS NULL OR fault NOT LIKE 'stuck%' GROUP BY stop"
    ).fetchall()
    whole = {stop for stop, share in rows if share == 1}
    assert whole == {truth.ROUNDED_STOP}
    assert max(share for stop, share in rows if stop not in whole) < 0.1
    (far,) = one_row(
        truth_connection,
        "SELECT max(abs(dwell_s - clean_dwell_s)) FROM visits WHERE fault = 'rounded'",
    )
    assert far <= truth.ROUNDING_STEP_S / 2 + 0.05 + 1e-9


def test_payment_changes_on_the_day_the_reader_was_fitted(truth_connection: Connection) -> None:
    wrong, changed, never = one_row(
        truth_connection,
        "SELECT count_if((payment = 'tap reader') IS DISTINCT FROM "
        "coalesce(day >= reader_fitted, false)), count(DISTINCT vehicle) "
        "FILTER (WHERE reader_fitted IS NOT NULL), count(DISTINCT vehicle) "
        "FILTER (WHERE reader_fitted IS NULL) FROM visits JOIN warehouse.vehicles USING (vehicle)",
    )
    assert wrong == 0
    assert (changed, never) == (110, 10)


@pytest.mark.parametrize("route", ROUTES)
def test_tap_reader_effect_on_the_clean_dwell(scored: Connection, route: str) -> None:
    # the day part's share of each way of paying differs a little: compare scores, not seconds
    spread = truth.ROUTE_BY_CODE[route].log_spread
    difference, n_tap, n_cash = one_row(
        scored,
        "WITH logs AS (SELECT payment, z * log_spread + ln(median_s) - ln(cash_s) AS effect "
        "FROM scored JOIN (SELECT DISTINCT route, day_part, median_s AS cash_s FROM scored "
        f"WHERE payment = 'cash box') USING (route, day_part) WHERE route = '{route}') "
        "SELECT avg(effect) FILTER (WHERE payment = 'tap reader') - "
        "avg(effect) FILTER (WHERE payment = 'cash box'), count_if(payment = 'tap reader'), "
        "count_if(payment = 'cash box') FROM logs",
    )
    error = spread * math.sqrt(1 / n_tap + 1 / n_cash)
    assert abs(difference - math.log(truth.ROUTE_BY_CODE[route].tap_factor)) < 4 * error
    if route != "L9":
        assert difference < -4 * error, "a real effect shows"


def test_effect_is_real_on_all_routes_but_one() -> None:
    assert [route.route for route in truth.ROUTES if route.tap_factor == 1] == ["L9"]
    assert all(route.tap_factor <= 0.9 for route in truth.ROUTES if route.route != "L9")


def test_shares_of_routes_and_day_parts(truth_connection: Connection) -> None:
    assert sum(route.visit_percent for route in truth.ROUTES) == 100
    assert sum(part.visit_percent for part in truth.DAY_PARTS) == 100
    for column, stated in (
        ("route", {route.route: route.visit_percent for route in truth.ROUTES}),
        ("day_part", {part.name: part.visit_percent for part in truth.DAY_PARTS}),
    ):
        rows = truth_connection.execute(
            f"SELECT {column}, count(*), sum(count(*)) OVER () FROM visits GROUP BY 1"
        ).fetchall()
        assert {name for name, *_ in rows} == set(stated)
        for name, count, n in rows:
            share = stated[name] / 100
            assert abs(count / n - share) < five_errors_of_share(share, n) + 0.003, name


def test_sundays_are_quieter_than_weekdays(truth_connection: Connection) -> None:
    weekday, sunday = one_row(
        truth_connection,
        "SELECT count(*) FILTER (WHERE isodow(day) < 6) / count(DISTINCT day) "
        "FILTER (WHERE isodow(day) < 6), count(*) FILTER (WHERE isodow(day) = 7) / "
        "count(DISTINCT day) FILTER (WHERE isodow(day) = 7) FROM visits",
    )
    assert sunday / weekday == pytest.approx(truth.SUNDAY_WEIGHT / truth.WEEKDAY_WEIGHT, rel=0.02)


def test_warehouse_joins_to_every_visit(truth_connection: Connection) -> None:
    joined, n = one_row(
        truth_connection,
        "SELECT (SELECT count(*) FROM visits JOIN warehouse.routes USING (route) "
        "JOIN warehouse.stops ON stops.stop = visits.stop AND stops.route = visits.route "
        "JOIN warehouse.vehicles ON vehicles.vehicle = visits.vehicle "
        "AND vehicles.depot = routes.depot), (SELECT count(*) FROM visits)",
    )
    assert joined == n
    sizes = one_row(
        truth_connection,
        "SELECT (SELECT count(DISTINCT route) FROM warehouse.routes), "
        "(SELECT count(DISTINCT name) FROM warehouse.stops), "
        "(SELECT count(DISTINCT vehicle) FROM warehouse.vehicles)",
    )
    assert sizes == (12, sum(route.stops for route in truth.ROUTES), 120)


def test_long_dwells_go_with_boardings_and_ramps(truth_connection: Connection) -> None:
    boardings, alightings, with_ramp, without, share = one_row(
        truth_connection,
        "SELECT corr(ln(clean_dwell_s), boardings), corr(ln(clean_dwell_s), alightings), "
        "median(clean_dwell_s) FILTER (WHERE ramp_used), "
        "median(clean_dwell_s) FILTER (WHERE NOT ramp_used), avg(ramp_used::INTEGER) FROM visits",
    )
    assert 0.3 < alightings + 0.2 < boardings < 0.8
    assert with_ramp > 1.5 * without
    assert 0.003 < share < 0.03
    (negative,) = one_row(
        truth_connection, "SELECT count_if(boardings < 0 OR alightings < 0) FROM visits"
    )
    assert negative == 0
