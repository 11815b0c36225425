"""Each choice against scipy, and the shuffles against all arrangements of the labels."""

import itertools
import math
from typing import Any

import duckdb
import numpy as np
import pytest
import scipy.stats

from tests.udfs.table_calls import answer

SCALES = {"raw": lambda x: x, "log": np.log, "sqrt": np.sqrt}
SHARES = {"mean": 0.0, "trimmed_mean(0.1)": 0.1, "trimmed_mean(0.2)": 0.2}


def table(
    connection: duckdb.DuckDBPyConnection, one: Any, other: Any, more: str = ""
) -> list[dict[str, Any]]:
    connection.execute("CREATE OR REPLACE TEMP TABLE sides (payment VARCHAR, dwell_s DOUBLE)")
    for name, values in (("cash box", one), ("tap reader", other)):
        connection.execute("INSERT INTO sides SELECT ?, unnest(?)", [name, list(values)])
    return answer(connection, f"FROM choices_table('sides', 'dwell_s', 'payment'{more})")


def limits(y: Any, rule: str) -> tuple[float, float]:
    """From the pooled values; fourths as numpy's medians of the halves (Tukey's hinges)."""
    y = np.sort(y)
    if rule == "fences":
        half = (y.size + 1) // 2
        low, high = np.median(y[:half]), np.median(y[y.size - half :])
        return low - 1.5 * (high - low), high + 1.5 * (high - low)
    if rule == "median_mad":
        reach = 3.0 * scipy.stats.median_abs_deviation(y, scale="normal")
        return np.median(y) - reach, np.median(y) + reach
    return -math.inf, math.inf


def median_error(x: Any) -> float:
    """McKean & Schrader 1984, written out."""
    x, z = np.sort(x), scipy.stats.norm.ppf(0.995)
    c = max(1, round((x.size + 1) / 2 - z * math.sqrt(x.size / 4)))
    return float(x[x.size - c] - x[c - 1]) / (2 * z)


def judged(one: Any, other: Any, scale: str, rule: str, estimator: str) -> dict[str, float]:
    """One choice by scipy: Welch's and Yuen's intervals from ttest_ind with trim."""
    a, b = SCALES[scale](one), SCALES[scale](other)
    low, high = limits(np.concatenate((a, b)), rule)
    a, b = (v[(v >= low) & (v <= high)] for v in (a, b))
    away = np.concatenate((abs(a - np.median(a)), abs(b - np.median(b))))
    robust = np.median(away) / scipy.stats.norm.ppf(0.75)
    if estimator == "median":
        estimate = np.median(b) - np.median(a)
        reach = scipy.stats.norm.ppf(0.975) * math.hypot(median_error(a), median_error(b))
        lower, upper = estimate - reach, estimate + reach
    else:
        share = SHARES[estimator]
        estimate = scipy.stats.trim_mean(b, share) - scipy.stats.trim_mean(a, share)
        interval = scipy.stats.ttest_ind(b, a, equal_var=False, trim=share)
        lower, upper = interval.confidence_interval(0.95)
    return {
        "n_baseline": a.size,
        "n_other": b.size,
        "estimate": estimate,
        "effect": estimate / robust,
        "lower": lower,
        "upper": upper,
    }


def test_every_choice_as_scipy(connection: duckdb.DuckDBPyConnection) -> None:
    generator = np.random.default_rng(8)
    one = np.round(generator.lognormal(3.0, 0.8, 61), 2)
    other = np.round(generator.lognormal(3.4, 0.6, 48), 2)
    rows = table(connection, one, other, ", shuffles := 3")
    assert len(rows) == 36
    for row in rows:
        expected = judged(one, other, row["re_expression"], row["rule"], row["estimator"])
        found = {name: row[name] for name in expected}
        assert found == pytest.approx(expected, rel=1e-10)
    assert len({row["n_other"] for row in rows}) > 2, "the rules cut something"


def test_standard_error_of_the_median_as_published(connection: duckdb.DuckDBPyConnection) -> None:
    """Wilcox's self-awareness data, S_M = (515 − 114) / (2 · 2.576) = 77.8 (from memory).

    Against values without spread the limits rest on it alone.
    """
    awareness = [77, 87, 88, 114, 151, 210, 219, 246, 253, 262, 296, 299, 306, 376, 428]
    awareness += [515, 666, 1310, 2611]
    (row,) = table(
        connection,
        [0.0] * 19,
        [float(v) for v in awareness],
        ", estimators := 'median', re_expressions := 'raw', rules := 'none', shuffles := 1",
    )
    error = (row["upper"] - row["lower"]) / (2 * scipy.stats.norm.ppf(0.975))
    assert (row["estimate"], round(error, 1)) == (262.0, 77.8)


def test_shuffles_as_all_arrangements(connection: duckdb.DuckDBPyConnection) -> None:
    """Nine values, 126 ways to deal five labels: shares and p of 20,000 shuffles as of all."""
    values = np.array([3.1, 4.7, 5.0, 6.2, 8.8, 9.1, 12.5, 14.0, 31.0])
    mine = np.array([0, 1, 3, 4, 7])
    scales, rules = ("raw", "sqrt"), ("none", "fences")
    estimators = ("mean", "median", "trimmed_mean(0.2)")
    choices = list(itertools.product(scales, rules, estimators))
    shares = {}
    for chosen in itertools.combinations(range(9), 5):
        is_one = np.isin(np.arange(9), chosen)
        found = [judged(values[is_one], values[~is_one], *choice) for choice in choices]
        signs = np.array([np.sign(figure["estimate"]) for figure in found])
        excluding = [figure["lower"] > 0 or figure["upper"] < 0 for figure in found]
        shares[chosen] = max((signs > 0).mean(), (signs < 0).mean()), np.mean(excluding)
    one, other = values[mine], np.delete(values, mine)
    rows = table(
        connection,
        one,
        other,
        f", re_expressions := {list(scales)}, rules := {list(rules)}, "
        f"estimators := {list(estimators)}, shuffles := 20000",
    )
    every = np.array(list(shares.values()))
    same, excluding = shares[tuple(mine.tolist())]
    assert rows[0]["share_same_sign"] == pytest.approx(same)
    assert rows[0]["share_excluding_zero"] == pytest.approx(excluding)
    # Five standard errors of a mean of 20,000.
    assert rows[0]["expected_same_sign"] == pytest.approx(every[:, 0].mean(), abs=0.006)
    assert rows[0]["expected_excluding_zero"] == pytest.approx(every[:, 1].mean(), abs=0.01)
    p = (every[:, 1] >= excluding - 1e-9).mean()
    assert rows[0]["p_excluding_zero"] == pytest.approx(p, abs=0.018)
