"""Welch's test of trimmed means against statsmodels and scipy, and its rules."""

import math
from typing import Any

import duckdb
import numpy as np
import pytest
import scipy.stats
from statsmodels.stats.oneway import anova_oneway

from midspread.udfs import register
from tests.udfs.calling import bits
from tests.udfs.table_calls import complaint

FIELDS = ("f", "df1", "df2", "p_value")


def welch(
    connection: duckdb.DuckDBPyConnection, levels: list[Any], share: float = 0.2
) -> dict[str, Any]:
    rows = [(f"stop {i}", float(v)) for i, values in enumerate(levels) for v in values]
    ((found,),) = connection.execute(
        f"SELECT trimmed_anova(dwell_s, stop, {share}) FROM (SELECT "
        "unnest($names::VARCHAR[]) AS stop, unnest($values::DOUBLE[]) AS dwell_s)",
        {"names": [name for name, _ in rows], "values": [value for _, value in rows]},
    ).fetchall()
    return dict(found)


def levels_of(seed: int, count: int) -> list[np.ndarray[Any, Any]]:
    generator = np.random.default_rng(seed)
    return [
        generator.lognormal(3.0 + 0.05 * i, 0.3 + 0.1 * i, int(generator.integers(10, 70)))
        for i in range(count)
    ]


@pytest.mark.parametrize("count", [2, 3, 7])
@pytest.mark.parametrize("share", [0.0, 0.1, 0.2, 0.3])
def test_as_statsmodels(connection: duckdb.DuckDBPyConnection, share: float, count: int) -> None:
    """statsmodels.stats.oneway.anova_oneway(use_var="unequal", trim_frac=share)."""
    levels = levels_of(3, count)
    theirs = anova_oneway(levels, use_var="unequal", trim_frac=share)
    found = welch(connection, levels, share)
    assert found["f"] == pytest.approx(theirs.statistic, rel=1e-11)
    assert found["df1"] == count - 1
    assert found["df2"] == pytest.approx(theirs.df_denom, rel=1e-11)
    assert found["p_value"] == pytest.approx(theirs.pvalue, rel=1e-9)


def test_two_levels_give_the_square_of_yuens_t(connection: duckdb.DuckDBPyConnection) -> None:
    for share in (0.0, 0.15, 0.2):
        a, b = levels_of(5, 2)
        theirs = scipy.stats.ttest_ind(a, b, equal_var=False, trim=share)
        found = welch(connection, [a, b], share)
        assert found["f"] == pytest.approx(theirs.statistic**2, rel=1e-11)
        assert found["df2"] == pytest.approx(theirs.df, rel=1e-11)
        assert found["p_value"] == pytest.approx(theirs.pvalue, rel=1e-9)


def test_p_is_uniform_under_the_null(connection: duckdb.DuckDBPyConnection) -> None:
    """Three levels of one centre with spreads 1, 2, 3 and sizes 30, 40, 50."""
    found = connection.execute(
        "SELECT trimmed_anova(x * (1 + label), label).p_value FROM (SELECT g, label, "
        "sqrt(-2 * ln((hash(g * 97 + label * 13 + i * 2003) % 1000003 + 1) / 1000004.0)) * "
        "cos(2 * pi() * (hash(g * 89 + label * 17 + i * 3001) % 1000003) / 1000003.0) AS x "
        "FROM range(1500) a(g), range(3) b(label), range(50) c(i) WHERE i < 30 + 10 * label) "
        "GROUP BY g"
    ).fetchall()
    p = np.array(found)[:, 0]
    for bound in (0.01, 0.05, 0.2, 0.5, 0.9):
        spread = math.sqrt(bound * (1 - bound) / p.size)
        assert abs(float((p <= bound).mean()) - bound) < 3 * spread + 0.1 * bound


def test_levels_that_cannot_take_part(connection: duckdb.DuckDBPyConnection) -> None:
    levels = [list(values) for values in levels_of(7, 3)]
    whole = welch(connection, levels)
    for tiny in ([5.0], [1.0, 9.0, 4.0, 4.5, 700.0][:1]):
        assert bits(welch(connection, [*levels, tiny])) == bits(whole)
    nothing = dict.fromkeys(FIELDS)
    assert welch(connection, [*levels, [4.0] * 12]) == nothing  # no spread, weight without bound
    assert welch(connection, [levels[0]]) == nothing
    assert welch(connection, [levels[0], [3.0]]) == nothing
    assert welch(connection, [[1.0], [3.0], [4.0]]) == nothing
    spoilt = welch(connection, [*levels, [*levels[0], math.nan]])
    assert all(math.isnan(spoilt[name]) for name in FIELDS)
    wild = welch(connection, [[*levels[0], math.inf, -math.inf], *levels[1:]])
    assert bits(wild) == bits(welch(connection, [[*levels[0], 1e300, -1e300], *levels[1:]]))


def test_gaps_smallest_group_and_a_share_for_each_group(
    connection: duckdb.DuckDBPyConnection,
) -> None:
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE stops AS SELECT i % 4 AS route, hash(i) % 3 AS stop, "
        "(hash(i * 7) % 1000) / 8.0 AS dwell_s, 0.05 * (i % 4) AS share FROM range(400) t(i)"
    )
    alone = [
        connection.execute(
            f"SELECT trimmed_anova(dwell_s, stop, {0.05 * route}) FROM stops WHERE route = {route}"
        ).fetchall()[0][0]
        for route in range(4)
    ]
    gaps = (
        "(FROM stops UNION ALL FROM (VALUES (0, NULL, 5.0, 0.0), (1, 2, NULL, 0.05), "
        "(8, 1, 4.0, 0.1), (9, NULL, NULL, 0.1)) AS t)"
    )
    found = connection.execute(
        "SELECT trimmed_anova(dwell_s, stop, any_value(share)) "
        f"FROM {gaps} GROUP BY route ORDER BY route"
    ).fetchall()
    assert bits([row[0] for row in found[:4]]) == bits(alone)
    assert [row[0] for row in found[4:]] == [None, None]


def test_the_same_bits_for_any_order_and_number_of_threads() -> None:
    found = []
    for threads, order in ((1, "i"), (4, "hash(i)")):
        with duckdb.connect(config={"threads": threads}) as connection:
            register(connection)
            connection.execute(
                "CREATE TABLE visits AS SELECT i % 7 AS route, 'stop ' || hash(i) % 9 AS stop, "
                "1e9 + (hash(i * 5) % 4001) / 8.0 AS dwell_s FROM range(300000) t(i) "
                f"ORDER BY {order}"
            )
            query = "SELECT route, trimmed_anova({}, stop) FROM visits GROUP BY route ORDER BY 1"
            found.append(bits(connection.execute(query.format("dwell_s")).fetchall()))
            near = connection.execute(query.format("dwell_s - 1e9")).fetchall()
            far = connection.execute(query.format("dwell_s")).fetchall()
            for (_, one), (_, other) in zip(near, far, strict=True):
                assert one["p_value"] == pytest.approx(other["p_value"], rel=1e-6)
    assert found[0] == found[1]


@pytest.mark.parametrize("share", ["0.5", "-0.1", "NULL", "'a'"])
def test_wrong_shares(connection: duckdb.DuckDBPyConnection, share: str) -> None:
    said = complaint(connection, f"SELECT trimmed_anova(i, i % 2, {share}) FROM range(20) t(i)")
    assert said.startswith("trimmed_anova: share must be a number from 0 and below 0.5, got ")
