"""How far each estimator lands from the clean truth, on the contaminated visits.

The contamination is mostly one-sided, so every estimator is biased upwards: what is asserted is
the order and the size of the bias, route by route, against the same estimator on the clean column.
"""

import math
from statistics import NormalDist

import duckdb
import pytest

from midspread.demo_db import truth
from midspread.udfs import register

Connection = duckdb.DuckDBPyConnection

# estimator -> (most bias on an ordinary route, most bias on the layover route), as shares of the
# clean figure; rounded up from the figures measured when the demo was made
LOCATION = {
    "trimmed_mean({x}, 0.1)": (0.05, 0.10),
    "trimmed_mean({x}, 0.2)": (0.05, 0.08),
    "winsorized_mean({x}, 0.2)": (0.05, 0.09),
    "trimean({x})": (0.05, 0.08),
    "median({x})": (0.05, 0.06),
    "huber_location({x})": (0.05, 0.09),
    "bisquare_location({x})": (0.03, 0.04),
    "hodges_lehmann({x})": (0.05, 0.09),
    "harrell_davis({x})": (0.05, 0.06),
    # the mode looks at few values, so it scatters; but it scatters about the truth
    "half_sample_mode({x})": (0.20, 0.20),
}
SCALE = {
    "mad_scale({x})": (0.10, 0.22),
    "iqr_scale({x})": (0.10, 0.25),
    "qn_scale({x})": (0.10, 0.24),
    "sn_scale({x})": (0.10, 0.20),
    "winsorized_sd({x}, 0.2)": (0.10, 0.26),
    "bisquare_scale({x})": (0.08, 0.10),
}
LAYOVER_ROUTE = "L3"
ROUTES = [route.route for route in truth.ROUTES]


@pytest.fixture(scope="module")
def equipped(truth_connection: Connection) -> Connection:
    register(truth_connection)
    return truth_connection


def biases(connection: Connection, estimator: str) -> dict[str, float]:
    """Relative error of an estimator by route: contaminated over clean, less one."""
    recorded, clean = (estimator.format(x=column) for column in ("dwell_s", "clean_dwell_s"))
    rows = connection.execute(
        f"SELECT route, {recorded} / {clean} - 1 FROM visits GROUP BY route"
    ).fetchall()
    return dict(rows)


def by_route(connection: Connection, expression: str) -> dict[str, float]:
    return dict(
        connection.execute(f"SELECT route, {expression} FROM visits GROUP BY route").fetchall()
    )


def test_mean_and_deviation_are_spoilt_on_every_route(equipped: Connection) -> None:
    assert min(biases(equipped, "avg({x})").values()) > 0.5
    assert biases(equipped, "avg({x})")[LAYOVER_ROUTE] > 2
    assert min(biases(equipped, "stddev({x})").values()) > 10
    assert min(biases(equipped, "gini_mean_difference({x})").values()) > 1


@pytest.mark.parametrize("estimator", LOCATION)
def test_robust_location_lands_near_the_clean_truth(equipped: Connection, estimator: str) -> None:
    ordinary, layover = LOCATION[estimator]
    means = biases(equipped, "avg({x})")
    for route, bias in biases(equipped, estimator).items():
        assert abs(bias) < (layover if route == LAYOVER_ROUTE else ordinary), route
        assert 5 * abs(bias) < means[route], route


@pytest.mark.parametrize("estimator", SCALE)
def test_robust_scale_lands_near_the_clean_truth(equipped: Connection, estimator: str) -> None:
    ordinary, layover = SCALE[estimator]
    deviations = biases(equipped, "stddev({x})")
    for route, bias in biases(equipped, estimator).items():
        assert 0 < bias < (layover if route == LAYOVER_ROUTE else ordinary), route
        assert 50 * bias < deviations[route], route


@pytest.mark.parametrize(
    "estimator",
    ["trimmed_mean({x}, 0.2)", "trimean({x})", "huber_location({x})", "hodges_lehmann({x})"],
)
def test_contamination_from_above_pulls_every_estimator_up(
    equipped: Connection, estimator: str
) -> None:
    pulls = biases(equipped, estimator)
    assert min(pulls.values()) > 0
    assert max(pulls, key=pulls.__getitem__) == LAYOVER_ROUTE, "most contaminated, most biased"


def test_more_trimming_withstands_more(equipped: Connection) -> None:
    pulls = {
        share: biases(equipped, f"trimmed_mean({{x}}, {share})")[LAYOVER_ROUTE]
        for share in (0, 0.02, 0.05, 0.1, 0.2)
    }
    assert sorted(pulls.values(), reverse=True) == list(pulls.values())
    # 1 in 13 visits of this route is a booked layover: a share below that breaks down
    assert 0.05 < truth.layover_share(LAYOVER_ROUTE) < 0.1
    assert pulls[0.05] > 0.5 and pulls[0.1] < 0.1


@pytest.mark.parametrize("route", ["L1", "L3", "L10", "L12"])
def test_size_of_the_medians_bias_follows_from_the_shares(equipped: Connection, route: str) -> None:
    # Of the rest, a share `low` stuck at zero and `high` above everything: the median of all is
    # then the quantile (1/2 - low) / (1 - low - high) of the clean distribution. Depots without
    # the drifting vehicle and the rounded stop only.
    spread = truth.ROUTE_BY_CODE[route].log_spread
    cells = " ".join(
        f"WHEN day_part = '{part.name}' AND payment = '{payment}' "
        f"THEN {truth.median_s(route, part.name, payment)!r}::DOUBLE"
        for part in truth.DAY_PARTS
        for payment in truth.STUCK_SHARE
    )
    row = equipped.execute(
        f"SELECT median(ln(greatest(dwell_s, 0.01) / CASE {cells} END) / {spread}), "
        "avg((payment = 'tap reader')::INTEGER), count(dwell_s) "
        f"FROM visits WHERE route = '{route}'"
    ).fetchone()
    assert row is not None
    score, tap, n = row
    stuck = (1 - tap) * truth.STUCK_SHARE[truth.CASH_BOX] + tap * truth.STUCK_SHARE[
        truth.TAP_READER
    ]
    low = stuck * truth.STUCK_AT_ZERO_PART
    high = stuck - low + truth.layover_share(route)
    expected = NormalDist().inv_cdf((0.5 - low) / (1 - low - high))
    # four standard errors of a median of normal scores, sqrt(pi / 2) / sqrt(n) each
    assert abs(score - expected) < 4 * math.sqrt(math.pi / 2 / n)
    if route == LAYOVER_ROUTE:
        assert score > 4 * math.sqrt(math.pi / 2 / n), "here the bias stands out of the noise"


def test_mean_misranks_the_routes_and_the_trimmed_mean_does_not(equipped: Connection) -> None:
    means = by_route(equipped, "avg(dwell_s)")
    trimmed = by_route(equipped, "trimmed_mean(dwell_s, 0.2)")
    clean = by_route(equipped, "avg(clean_dwell_s)")
    assert max(means, key=means.__getitem__) == LAYOVER_ROUTE
    assert sorted(clean, key=clean.__getitem__).index(LAYOVER_ROUTE) <= 1
    assert sorted(trimmed, key=trimmed.__getitem__).index(LAYOVER_ROUTE) <= 1


def test_only_robust_scales_find_the_uneven_route(equipped: Connection) -> None:
    uneven = max(truth.ROUTES, key=lambda route: route.log_spread).route
    for scale in ("mad_scale", "iqr_scale", "qn_scale", "sn_scale"):
        figures = by_route(equipped, f"{scale}(dwell_s) / median(dwell_s)")
        assert max(figures, key=figures.__getitem__) == uneven, scale
    deviations = by_route(equipped, "stddev(dwell_s) / median(dwell_s)")
    assert max(deviations, key=deviations.__getitem__) != uneven


@pytest.fixture(scope="module")
def effects(equipped: Connection) -> dict[str, tuple[float, float, float]]:
    """By route: tap reader over cash box by trimmed mean, by mean, and the first's noise."""
    # FILTER is for the session to rewrite; a bare connection takes CASE
    rows = equipped.execute(
        "SELECT route, trimmed_mean(tap, 0.2) / trimmed_mean(cash, 0.2), avg(tap) / avg(cash), "
        "sqrt(1 / count(tap) + 1 / count(cash)) FROM (SELECT route, "
        "CASE WHEN payment = 'tap reader' THEN dwell_s END AS tap, "
        "CASE WHEN payment = 'cash box' THEN dwell_s END AS cash FROM visits "
        f"WHERE vehicle <> '{truth.DRIFTING_VEHICLE}') GROUP BY route"
    ).fetchall()
    # day parts add some spread to the route's own, and a trimmed mean is a little less efficient
    return {
        route: (trimmed, mean, 1.1 * (truth.ROUTE_BY_CODE[route].log_spread + 0.1) * root)
        for route, trimmed, mean, root in rows
    }


@pytest.mark.parametrize("route", ROUTES)
def test_trimmed_mean_finds_the_tap_reader_effect(
    effects: dict[str, tuple[float, float, float]], route: str
) -> None:
    ratio, _, noise = effects[route]
    factor = truth.ROUTE_BY_CODE[route].tap_factor
    assert abs(ratio - factor) < 4 * noise
    if factor != 1:
        assert ratio < 1 - 2 * noise, "a real effect stands out of the noise"


def test_mean_invents_a_tap_reader_effect(
    effects: dict[str, tuple[float, float, float]],
) -> None:
    # The new clocks stick less often; the mean books that as quicker boarding.
    (route,) = (route.route for route in truth.ROUTES if route.tap_factor == 1)
    trimmed, mean, noise = effects[route]
    assert abs(trimmed - 1) < 4 * noise < 0.1
    assert mean < 0.8
    factors = {route.route: route.tap_factor for route in truth.ROUTES}
    by_trimmed = sum(abs(effects[route][0] - factor) for route, factor in factors.items())
    by_mean = sum(abs(effects[route][1] - factor) for route, factor in factors.items())
    assert by_mean > 5 * by_trimmed
