"""Leaving out values and units against statsmodels and scipy; standard errors in closed form."""

import math
from typing import Any

import duckdb
import numpy as np
import pytest
import statsmodels.api as sm
from scipy import stats
from statsmodels.stats.outliers_influence import OLSInfluence

from tests.references.published import NAMES, published
from tests.udfs.table_calls import answer


def given(connection: duckdb.DuckDBPyConnection, x: np.ndarray[Any, Any]) -> None:
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE given AS SELECT unnest($x::DOUBLE[]) AS x, "
        "unnest($units::INTEGER[]) AS vehicle",
        {"x": x.tolist(), "units": [i % 7 for i in range(x.size)]},
    )


@pytest.mark.parametrize("name", NAMES)
def test_mean_without_each_value(connection: duckdb.DuckDBPyConnection, name: str) -> None:
    """statsmodels: dfbeta of a regression on nothing but a constant, with the other sign."""
    x = np.array(published(name))
    given(connection, x)
    expected = -OLSInfluence(sm.OLS(x, np.ones(x.size)).fit()).dfbeta[:, 0]
    rows = answer(
        connection,
        "FROM influential_values('given', 'x', statistic := 'mean', top := 100000)",
    )
    assert sum(row["count"] for row in rows) == x.size
    for row in rows:
        for change in expected[(x >= row["lowest"]) & (x <= row["highest"])]:
            assert row["change"] == pytest.approx(change, rel=1e-7, abs=1e-11 * np.ptp(x))
    assert abs(rows[0]["change"]) == pytest.approx(np.abs(expected).max(), rel=1e-9)


@pytest.mark.parametrize("name", ["chem", "newcomb", "rivers", "morley"])
@pytest.mark.parametrize("share", [0.1, 0.2, 0.35])
def test_trimmed_mean_without_values_and_units(
    connection: duckdb.DuckDBPyConnection, name: str, share: float
) -> None:
    """scipy: trim_mean of what is left."""
    x = np.array(published(name))
    given(connection, x)
    statistic = f"trimmed_mean({share})"
    rows = answer(
        connection,
        f"FROM influential_values('given', 'x', statistic := '{statistic}', top := 100000)",
    )
    for row in rows:
        for place in np.flatnonzero((x >= row["lowest"]) & (x <= row["highest"])):
            expected = stats.trim_mean(np.delete(x, place), share)
            assert row["estimate_without"] == pytest.approx(expected, rel=1e-12)
    units = np.arange(x.size) % 7
    found = answer(
        connection, f"FROM leave_one_out('given', 'x', 'vehicle', statistic := '{statistic}')"
    )
    assert len(found) == min(7, x.size)
    for row in found:
        rest = x[units != row["unit"]]
        assert row["estimate_without"] == pytest.approx(stats.trim_mean(rest, share), rel=1e-12)
        assert row["n_left_out"] == x.size - rest.size


@pytest.mark.parametrize("n", [3_000, 9_000, 40_000, 1_000_000])
def test_standard_errors_in_closed_form(connection: duckdb.DuckDBPyConnection, n: int) -> None:
    """sd / √n of the mean, trimmed_mean_se (Yuen 1974), √(π / 2n) of a normal median.

    Bootstrap (400) and random groups (200 parts) are good to 3.5 and 5 %; four times that here.
    """
    x = np.random.default_rng(n).normal(1e6, 3.0, n)
    given(connection, x)
    ((ten, twenty),) = connection.execute(
        "SELECT trimmed_mean_se(x, 0.1), trimmed_mean_se(x, 0.2) FROM given"
    ).fetchall()
    rows = {r["estimator"]: r for r in answer(connection, "FROM location_estimates('given', 'x')")}
    tolerance = 0.14 if n <= 10_000 else 0.2
    for name, expected in (
        ("mean", np.std(x, ddof=1) / math.sqrt(n)),
        ("trimmed_mean_10", ten),
        ("trimmed_mean_20", twenty),
        ("median", 3.0 * math.sqrt(math.pi / (2 * n))),
        ("hodges_lehmann", 3.0 * math.sqrt(math.pi / (3 * n))),
    ):
        assert rows[name]["se"] == pytest.approx(expected, rel=tolerance)
    # Var(median − mean) = (π/2 − 1) σ² / n: the mean is efficient, so they covary by its variance.
    apart = rows["median"]["difference"] / rows["median"]["difference_in_se"]
    assert apart == pytest.approx(3.0 * math.sqrt((math.pi / 2 - 1) / n), rel=tolerance)
    degrees = n - 1 if n <= 10_000 else 199
    reach = stats.t.ppf(0.975, degrees) * rows["trimean"]["se"]
    assert rows["trimean"]["upper"] - rows["trimean"]["estimate"] == pytest.approx(reach, rel=1e-6)
