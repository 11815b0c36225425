"""The scale of dwell is found, and on which routes the tap reader's effect holds."""

import math

import duckdb
import pytest

from midspread.demo_db import truth
from midspread.udfs import register

Connection = duckdb.DuckDBPyConnection
WITHOUT_EFFECT = {route.route for route in truth.ROUTES if route.tap_factor == 1.0}


@pytest.fixture(scope="module")
def equipped(truth_connection: Connection) -> Connection:
    register(truth_connection)
    return truth_connection


@pytest.mark.parametrize("column", ["clean_dwell_s", "dwell_s"])
def test_the_logarithm_is_the_best_rung(equipped: Connection, column: str) -> None:
    """Clean times are log-normal by construction; wild ones do not move the rung, but for L3.

    There three in ten visits to the two end stops have a layover booked.
    """
    rows = equipped.execute(
        "SELECT route, power, medcouple, expression FROM "
        f"power_ladder('(FROM visits WHERE {column} > 0)', '{column}', by := 'route') WHERE best"
    ).fetchall()
    found = {route: power for route, power, *_ in rows}
    assert len(found) == len(truth.ROUTES)
    if column == "dwell_s":
        assert found.pop("L3") in (-0.5, 0.0)
    assert set(found.values()) == {0.0}
    assert all(abs(medcouple) < 0.08 for _, _, medcouple, _ in rows)
    assert f'ln("{column}")' in {expression for *_, expression in rows}


def test_group_differences_find_the_route_without_an_effect(equipped: Connection) -> None:
    """On the logarithm a factor is a difference; the intervals hold the true one."""
    rows = equipped.execute(
        "SELECT route, difference, lower, upper, p_holm FROM group_differences("
        "'(SELECT *, ln(clean_dwell_s) AS log_s FROM visits WHERE clean_dwell_s > 0)', 'log_s', "
        "'payment', by := 'route', confidence := 0.999)"
    ).fetchall()
    assert len(rows) == len(truth.ROUTES)
    for route, _, lower, upper, _ in rows:
        assert lower < math.log(truth.ROUTE_BY_CODE[route].tap_factor) < upper
    assert {route for route, *_, p in rows if p > 0.01} == WITHOUT_EFFECT


def test_it_holds_in_every_decile_or_in_none(equipped: Connection) -> None:
    rows = equipped.execute(
        "SELECT route, count(*) FILTER (simultaneous_upper < 0), "
        "count(*) FILTER (simultaneous_lower > 0) FROM decile_shifts('visits', 'dwell_s', "
        "'payment', by := 'route', resamples := 100) GROUP BY route"
    ).fetchall()
    assert all(slower == 0 for _, _, slower in rows)
    assert {route for route, faster, _ in rows if faster < 4} == WITHOUT_EFFECT


def test_other_choices_agree_where_there_is_an_effect(equipped: Connection) -> None:
    rows = equipped.execute(
        "SELECT route, any_value(share_same_sign), any_value(share_excluding_zero), "
        "any_value(p_excluding_zero) FROM choices_table('(FROM visits WHERE dwell_s > 0)', "
        "'dwell_s', 'payment', by := 'route', shuffles := 30) GROUP BY route"
    ).fetchall()
    for route, same_sign, excluding, p in rows:
        if route in WITHOUT_EFFECT:
            assert excluding < 0.2 and p > 0.05
        else:
            assert same_sign == 1.0 and excluding > 0.8 and p == 1 / 31


def test_a_few_rows_turn_the_sign_only_where_there_is_no_effect(equipped: Connection) -> None:
    rows = equipped.execute(
        "SELECT route, share_of_rows FROM rows_to_reverse('visits', "
        "'dwell_s', 'payment', by := 'route', statistic := 'trimmed_mean(0.2)')"
    ).fetchall()
    assert {route for route, share in rows if share < 0.02} == WITHOUT_EFFECT
