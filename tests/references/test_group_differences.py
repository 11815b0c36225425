"""Comparison of two levels against scipy and statsmodels, pair by pair."""

import itertools
import math
from typing import Any

import duckdb
import numpy as np
import pytest
import scipy.stats
from statsmodels.stats.multitest import multipletests

from tests.udfs.table_calls import answer

SHARES = (0.0, 0.1, 0.2, 0.25, 0.45)


def samples(seed: int, levels: int, *, ties: bool) -> dict[str, np.ndarray[Any, Any]]:
    generator = np.random.default_rng(seed)
    found = {}
    for i in range(levels):
        values = generator.lognormal(3.0 + 0.1 * i, 0.5 + 0.1 * i, int(generator.integers(12, 90)))
        found[f"vehicle {i}"] = np.round(values) if ties else values
    return found


def compared(
    connection: duckdb.DuckDBPyConnection, given: dict[str, Any], more: str = ""
) -> list[dict[str, Any]]:
    connection.execute("CREATE OR REPLACE TEMP TABLE compared (vehicle VARCHAR, dwell_s DOUBLE)")
    for name, values in given.items():
        connection.execute(
            "INSERT INTO compared SELECT $name, unnest($values::DOUBLE[])",
            {"name": name, "values": [float(v) for v in values]},
        )
    return answer(connection, f"FROM group_differences('compared', 'dwell_s', 'vehicle'{more})")


@pytest.mark.parametrize("ties", [False, True])
@pytest.mark.parametrize("share", SHARES)
def test_yuen_as_scipy(connection: duckdb.DuckDBPyConnection, share: float, ties: bool) -> None:
    """scipy.stats.ttest_ind(equal_var=False, trim=share) for every pair."""
    given = samples(7, 5, ties=ties)
    rows = compared(connection, given, f", share := {share}, confidence := 0.9")
    assert [(r["label"], r["versus"]) for r in rows] == [
        (later, earlier) for later in given for earlier in given if earlier < later
    ]
    for row in rows:
        a, b = given[row["label"]], given[row["versus"]]
        theirs = scipy.stats.ttest_ind(a, b, equal_var=False, trim=share)
        interval = theirs.confidence_interval(0.9)
        assert (row["n"], row["n_versus"]) == (a.size, b.size)
        assert row["trimmed_mean"] == pytest.approx(scipy.stats.trim_mean(a, share), rel=1e-13)
        assert row["difference"] == row["trimmed_mean"] - row["trimmed_mean_versus"]
        assert row["p_value"] == pytest.approx(theirs.pvalue, rel=1e-9)
        assert row["lower"] == pytest.approx(interval.low, rel=1e-9)
        assert row["upper"] == pytest.approx(interval.high, rel=1e-9)


@pytest.mark.parametrize("ties", [False, True])
def test_ranks_as_scipy(connection: duckdb.DuckDBPyConnection, ties: bool) -> None:
    """scipy.stats.brunnermunzel and mannwhitneyu; U is the number of pairs won, ties one half."""
    given = samples(11, 6, ties=ties)
    for row in compared(connection, given):
        a, b = given[row["label"]], given[row["versus"]]
        won = scipy.stats.mannwhitneyu(a, b).statistic
        assert row["p_more"] == pytest.approx(won / (a.size * b.size), rel=1e-15)
        assert row["cliffs_delta"] == pytest.approx(2 * won / (a.size * b.size) - 1, abs=1e-15)
        theirs = scipy.stats.brunnermunzel(a, b)
        assert row["brunner_munzel_p"] == pytest.approx(theirs.pvalue, rel=1e-10)


@pytest.mark.parametrize("ties", [False, True])
def test_shift_is_the_median_of_all_differences(
    connection: duckdb.DuckDBPyConnection, ties: bool
) -> None:
    given = samples(13, 5, ties=ties)
    generator = np.random.default_rng(5)
    given["vehicle 8"] = generator.normal(20.0, 3.0, 1501)
    given["vehicle 9"] = np.round(generator.exponential(30.0, 1220) * (1 if ties else 1e6))
    for row in compared(connection, given):
        a, b = given[row["label"]], given[row["versus"]]
        assert row["hodges_lehmann_shift"] == np.median(np.subtract.outer(a, b))


def test_adjusted_as_statsmodels(connection: duckdb.DuckDBPyConnection) -> None:
    """statsmodels.stats.multitest.multipletests, holm and fdr_bh, with tied p as well."""
    given = samples(17, 8, ties=True)
    given["vehicle 7"] = given["vehicle 6"] = given["vehicle 5"]
    for more in ("", ", against := 'rest'", ", against := 'baseline'"):
        rows = compared(connection, given, more)
        p = np.array([row["p_value"] for row in rows])
        assert len(set(p.tolist())) < len(rows)
        for name, method in (("p_holm", "holm"), ("p_bh", "fdr_bh")):
            theirs = multipletests(p, method=method)[1]
            assert [row[name] for row in rows] == pytest.approx(theirs.tolist(), rel=1e-13)


def test_against_the_rest_and_a_baseline(connection: duckdb.DuckDBPyConnection) -> None:
    """The rest is one sample of all other values; the baseline is what is subtracted."""
    given = samples(19, 5, ties=True)
    for row in compared(connection, given, ", against := 'rest'"):
        a = given[row["label"]]
        b = np.concatenate([v for name, v in given.items() if name != row["label"]])
        theirs = scipy.stats.ttest_ind(a, b, equal_var=False, trim=0.2)
        assert row["versus"] is None
        assert (row["n"], row["n_versus"]) == (a.size, b.size)
        assert row["p_value"] == pytest.approx(theirs.pvalue, rel=1e-9)
        assert row["brunner_munzel_p"] == pytest.approx(
            scipy.stats.brunnermunzel(a, b).pvalue, rel=1e-9
        )
        assert row["hodges_lehmann_shift"] == np.median(np.subtract.outer(a, b))
    rows = compared(connection, given, ", against := 'baseline', baseline := 'vehicle 2'")
    assert [row["label"] for row in rows] == [name for name in given if name != "vehicle 2"]
    for row in rows:
        theirs = scipy.stats.ttest_ind(
            given[row["label"]], given["vehicle 2"], equal_var=False, trim=0.2
        )
        assert row["versus"] == "vehicle 2"
        assert row["p_value"] == pytest.approx(theirs.pvalue, rel=1e-9)


def test_without_overlap_the_exact_permutation_p(connection: duckdb.DuckDBPyConnection) -> None:
    """The samples of the help of scipy.stats.ttest_ind for trim; p by scipy.stats.mannwhitneyu."""
    a = (56.0, 128.6, 12.0, 123.8, 64.34, 78.0, 763.3)
    b = (1.1, 2.9, 4.2)
    (row,) = compared(connection, {"b": b, "a": a, "c": ()})
    (turned,) = compared(connection, {"a": b, "b": a})
    theirs = scipy.stats.ttest_ind(b, a, trim=0.2, equal_var=False)
    exact = scipy.stats.mannwhitneyu(a, b, method="exact").pvalue
    assert exact == pytest.approx(2 / math.comb(10, 3), rel=1e-12)
    for found in (row, turned):
        assert found["p_value"] == pytest.approx(theirs.pvalue, rel=1e-10)
        assert found["brunner_munzel_p"] == pytest.approx(exact, rel=1e-12)
        assert "do not overlap" in found["note"]


def test_brunner_and_munzels_example(connection: duckdb.DuckDBPyConnection) -> None:
    """Pain scores of Brunner & Munzel 2000, as in the help of scipy.stats.brunnermunzel.

    Its help gives p 0.0057862086661515377 (two-sided).
    """
    x1 = [1, 2, 1, 1, 1, 1, 1, 1, 1, 1, 2, 4, 1, 1]
    x2 = [3, 3, 4, 3, 1, 2, 3, 1, 1, 5, 4]
    (row,) = compared(connection, {"1": x1, "2": x2})
    assert row["brunner_munzel_p"] == pytest.approx(0.0057862086661515377, rel=1e-12)
    assert row["p_more"] == pytest.approx(0.788961, abs=5e-7)  # their estimate, from memory


def test_effect_is_cohens_d_on_normal_data(connection: duckdb.DuckDBPyConnection) -> None:
    """Algina, Keselman & Penfield 2005 rescale by 0.642 at share 0.2; exact normal quantiles."""
    probs = (np.arange(4000) + 0.5) / 4000
    normal = scipy.stats.norm.ppf(probs)
    given = {"1": 10.0 + 2.0 * normal, "2": 11.0 + 2.0 * normal}
    for share in SHARES:
        (row,) = compared(connection, given, f", share := {share}")
        assert row["effect"] == pytest.approx(0.5, rel=5e-3)
    a, b = samples(23, 2, ties=False).values()
    (row,) = compared(connection, {"1": a, "2": b})
    w = [scipy.stats.mstats.winsorize(v, (0.2, 0.2)).var(ddof=1) for v in (a, b)]
    pooled = math.sqrt(
        ((a.size - 1) * float(w[0]) + (b.size - 1) * float(w[1])) / (a.size + b.size - 2)
    )
    assert row["effect"] == pytest.approx(0.642 * row["difference"] / pooled, rel=2e-4)
    (row,) = compared(connection, {"1": a, "2": b}, ", share := 0")
    both = ((a.size - 1) * a.var(ddof=1) + (b.size - 1) * b.var(ddof=1)) / (a.size + b.size - 2)
    assert row["effect"] == pytest.approx((b.mean() - a.mean()) / math.sqrt(both), rel=1e-12)


def test_p_is_uniform_under_the_null(connection: duckdb.DuckDBPyConnection) -> None:
    """Two thousand comparisons of equal laws with unequal sizes: p below each bound as often."""
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE nulls AS SELECT g, label, "
        "-ln((hash(g * 31 + label * 7 + i * 1009) % 1000003 + 1) / 1000004.0) AS x "
        "FROM range(2000) a(g), range(2) b(label), range(60) c(i) WHERE label = 0 OR i < 40"
    )
    rows = answer(connection, "FROM group_differences('nulls', 'x', 'label', by := 'g')")
    for name in ("p_value", "brunner_munzel_p"):
        p = np.array([row[name] for row in rows])
        for bound in (0.01, 0.05, 0.2, 0.5, 0.9):
            spread = math.sqrt(bound * (1 - bound) / p.size)
            # Three standard errors, and the tests' own deviation from their level at such n.
            assert abs(float((p <= bound).mean()) - bound) < 3 * spread + 0.1 * bound
    covered = [row["lower"] <= 0.0 <= row["upper"] for row in rows]
    assert np.mean(covered) == pytest.approx(0.95, abs=0.02)
    assert all(row["p_holm"] >= row["p_bh"] >= row["p_value"] for row in rows)
    assert sum(row["p_holm"] < 0.05 for row in rows) <= 2


def test_every_pair_is_there_once(connection: duckdb.DuckDBPyConnection) -> None:
    given = samples(29, 7, ties=True)
    rows = compared(connection, given)
    pairs = {frozenset((row["label"], row["versus"])) for row in rows}
    assert len(rows) == len(pairs) == 21
    assert pairs == {frozenset(pair) for pair in itertools.combinations(given, 2)}
