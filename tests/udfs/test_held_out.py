"""What `fold` and `held_out_errors` promise."""

import itertools
import math
from collections.abc import Iterator, Sequence
from typing import Any

import duckdb
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tests.udfs.table_calls import answer, complaint

Rows = list[dict[str, Any]]


def held(
    connection: duckdb.DuckDBPyConnection,
    values: Sequence[float | None],
    more: str = "",
    statistics: str = "['mean', 'median', 'trimmed_mean(0.2)']",
) -> Rows:
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE held AS SELECT unnest(?::DOUBLE[]) AS x", [list(values)]
    )
    return answer(
        connection, f"FROM held_out_errors('held', 'x', statistics := {statistics}{more})"
    )


def splits(n: int, folds: int) -> Iterator[tuple[int, ...]]:
    """Every way to deal n values into folds whose sizes differ by at most 1."""
    sizes = sorted(i % folds for i in range(n))
    return (split for split in set(itertools.permutations(sizes)))


def mean_errors(x: Sequence[float], split: Sequence[int]) -> tuple[float, float, float, float]:
    """Plain cross-validation of the mean: absolute and squared error, lowest and highest."""
    means = {
        f: float(np.mean([v for v, own in zip(x, split, strict=True) if own != f]))
        for f in set(split)
    }
    misses = [abs(v - means[own]) for v, own in zip(x, split, strict=True)]
    return (
        float(np.mean(misses)),
        float(np.sqrt(np.mean(np.square(misses)))),
        min(means.values()),
        max(means.values()),
    )


@pytest.mark.parametrize("folds", [2, 3, 4, 5])
def test_dealt_into_balanced_folds(connection: duckdb.DuckDBPyConnection, folds: int) -> None:
    """The figures are those of one of the balanced splits, and the seed chooses which."""
    x = [1.0, 2.5, 4.0, 9.0, 20.0, 21.5, 40.0]
    possible = np.array([mean_errors(x, split) for split in splits(len(x), folds)])
    seen = set()
    for seed in range(12):
        row = held(connection, x, f", folds := {folds}, seed := {seed}")[0]
        found = (row["mean_absolute_error"], row["root_mean_squared_error"])
        found += (row["lowest"], row["highest"])
        assert np.isclose(possible, found, rtol=1e-12).all(axis=1).any()
        seen.add(found)
    assert len(seen) > 3


def test_every_balanced_split_is_as_likely(connection: duckdb.DuckDBPyConnection) -> None:
    """Four values in two folds: three splits, each in a third of 900 seeds (99.9 % bounds)."""
    x = [0.0, 1.0, 3.0, 7.0]
    counts: dict[float, int] = {}
    for seed in range(900):
        error = held(connection, x, f", folds := 2, seed := {seed}")[0]["mean_absolute_error"]
        counts[error] = counts.get(error, 0) + 1
    assert len(counts) == 3
    assert all(250 <= count <= 350 for count in counts.values()), counts


def test_whatever_the_order_and_the_split_of_rows(
    connection: duckdb.DuckDBPyConnection, generator: np.random.Generator
) -> None:
    x = np.round(generator.lognormal(3.0, 1.0, 5000), 1)
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE visits AS SELECT unnest(?) AS dwell_s, "
        "unnest(?) AS vehicle, unnest(?) AS route",
        [x.tolist(), (np.arange(5000) % 41).tolist(), (np.arange(5000) % 3).tolist()],
    )
    for unit in ("", ", unit := 'vehicle'"):
        call = "FROM held_out_errors('{}', 'dwell_s', by := 'route'" + unit + ")"
        expected = answer(connection, call.format("visits"))
        for seed in (0.1, 0.7):
            connection.execute(f"SELECT setseed({seed})")
            connection.execute(
                "CREATE OR REPLACE TEMP TABLE shuffled AS FROM visits ORDER BY random()"
            )
            for threads in (1, 2, 4):
                connection.execute(f"SET threads = {threads}")
                assert answer(connection, call.format("shuffled")) == expected
        assert answer(connection, call.format("visits").replace(")", ", seed := 1)")) != expected


def test_groups_do_not_touch_one_another(connection: duckdb.DuckDBPyConnection) -> None:
    sql = "(SELECT i % {} AS g, sqrt((i // {}) * 37 % 101) AS x FROM range({}) AS t(i))"
    alone = answer(connection, f"FROM held_out_errors('{sql.format(1, 1, 300)}', 'x', by := 'g')")
    many = sql.format(5000, 5000, 1_500_000)
    found = answer(connection, f"FROM held_out_errors('{many}', 'x', by := 'g')")
    assert len(found) == 15_000
    for row in found[:3] + found[-3:]:
        assert {**row, "g": 0} in alone


def test_fewer_values_than_folds(connection: duckdb.DuckDBPyConnection) -> None:
    for n in range(5):
        for row in held(connection, [None, *(1.5**i for i in range(n)), None]):
            assert (row["n"], row["folds"]) == (n, n)
            assert (row["estimate"] is None) == (n == 0)
            for name in ("lowest", "highest", "mean_absolute_error", "root_mean_squared_error"):
                assert (row[name] is None) == (n < 2)
    two = held(connection, [1.0, 5.0])[0]
    assert (two["lowest"], two["highest"], two["mean_absolute_error"]) == (1.0, 5.0, 4.0)


def test_a_rest_too_small_for_the_statistic(connection: duckdb.DuckDBPyConnection) -> None:
    (row,) = held(connection, [1.0, 5.0], statistics="'sd'")
    assert row["estimate"] is not None and row["lowest"] is None
    assert row["mean_absolute_error"] is None


def test_equal_values_are_predicted_exactly(connection: duckdb.DuckDBPyConnection) -> None:
    for value in (0.1, -7.3, 1e9 + 0.1, 1e300, math.inf):
        for row in held(connection, [value] * 30):
            assert row["estimate"] == row["lowest"] == row["highest"] == value
            assert row["mean_absolute_error"] == row["root_mean_squared_error"] == 0.0


def test_nan_and_infinity(connection: duckdb.DuckDBPyConnection) -> None:
    for row in held(connection, [1.0, math.nan, 3.0, 4.0]):
        assert all(math.isnan(row[name]) for name in list(row)[3:])
    mean, median, _ = held(connection, [*range(30), math.inf])
    assert mean["highest"] == mean["mean_absolute_error"] == math.inf
    assert median["highest"] <= 17.0
    assert median["mean_absolute_error"] == median["root_mean_squared_error"] == math.inf


def test_one_unit_leaves_nothing_to_learn_from(connection: duckdb.DuckDBPyConnection) -> None:
    sql = "(SELECT i AS x, ''bus'' AS vehicle FROM range(9) AS t(i))"
    for row in answer(connection, f"FROM held_out_errors('{sql}', 'x', unit := 'vehicle')"):
        assert (row["n"], row["folds"]) == (9, 1)
        assert row["estimate"] == 4.0 and row["mean_absolute_error"] is None


@settings(deadline=None)
@given(
    st.lists(st.integers(-40, 40).map(lambda v: v / 4), min_size=2, max_size=40),
    st.integers(2, 60),
    st.sampled_from([1.0, 1e9, 2.0**40]),
)
def test_shift_and_scale(
    connection: duckdb.DuckDBPyConnection, values: list[float], folds: int, shift: float
) -> None:
    more = f", folds := {folds}"
    plain = held(connection, values, more)
    for row in plain:
        assert row["lowest"] <= row["highest"]
        assert row["root_mean_squared_error"] >= row["mean_absolute_error"] * (1 - 1e-12)
    if folds < len(values):
        return  # another content is another deal
    for row, doubled, shifted in zip(
        plain,
        held(connection, [2.0 * v for v in values], more),
        held(connection, [v + shift for v in values], more),
        strict=True,
    ):
        for name in ("mean_absolute_error", "root_mean_squared_error"):
            assert doubled[name] == 2.0 * row[name]
            # Quarters shifted by 2^40 keep 2^-12 of the digits behind the point.
            assert shifted[name] == pytest.approx(row[name], rel=1e-12, abs=shift * 2.0**-50)
        assert doubled["highest"] == 2.0 * row["highest"]


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        ("folds := 1", "folds must be a whole number from 2 to 1e+06, got 1;"),
        ("folds := 2.5", "folds must be a whole number from 2 to 1e+06, got 2.5;"),
        ("folds := NULL", "folds must be a whole number from 2 to 1e+06, got NULL;"),
        ("folds := 'ten'", "folds must be a whole number from 2 to 1e+06, got 'ten';"),
        ("folds := true", "folds must be a whole number from 2 to 1e+06, got True;"),
        ("seed := -1", "seed must be a whole number from 0 to 9.0072e+15, got -1;"),
        ("statistics := []", "statistics must be a list of texts, at least one, got [];"),
        ("statistics := NULL", "statistics must be a list of texts, at least one, got None;"),
        ("statistics := [1]", "statistics must be a list of texts, at least one, got [1];"),
        ("statistics := 'mode'", "statistic must be one of mean, median, sd, "),
        ("statistics := ['mean', 'trimmed_mean(0.7)']", "trimmed_mean: share must be a number"),
        ("unit := 3", "unit must be the name of a column, got 3;"),
        ("by := 'folds'", "by names folds, which is also a column of the result;"),
    ],
)
def test_wrong_arguments(
    larkmoor: duckdb.DuckDBPyConnection, arguments: str, sentence: str
) -> None:
    said = complaint(larkmoor, f"FROM held_out_errors('visits', 'dwell_s', {arguments})")
    assert said.startswith(f"held_out_errors: {sentence}")
    assert said.endswith(".")


def test_null_units(larkmoor: duckdb.DuckDBPyConnection) -> None:
    said = complaint(larkmoor, "FROM held_out_errors('visits', 'dwell_s', unit := 'stop')")
    assert said.startswith("held_out_errors: unit must not be NULL, and stop is in some rows;")
    unmeasured = "(SELECT * FROM visits WHERE stop IS NOT NULL OR dwell_s IS NULL)"
    assert answer(larkmoor, f"FROM held_out_errors('{unmeasured}', 'dwell_s', unit := 'stop')")


@pytest.mark.parametrize(
    ("call", "sentence"),
    [
        ("fold('a', 1)", "folds must be a whole number from 2 to 1e+06, got 1;"),
        ("fold('a', 2.5)", "folds must be a whole number from 2 to 1e+06, got 2.5;"),
        ("fold('a', 1000001)", "folds must be a whole number from 2 to 1e+06, got 1000001;"),
        ("fold('a', NULL)", "folds must be a whole number from 2 to 1e+06, got NULL;"),
        ("fold('a', 'nan'::DOUBLE)", "folds must be a whole number from 2 to 1e+06, got nan;"),
        ("fold('a', 'ten')", "folds must be a whole number from 2 to 1e+06, got type VARCHAR;"),
        ("fold('a', seed := -1)", "seed must be a whole number from 0 to 9.0072e+15, got -1;"),
        ("fold('a', seed := 0.5)", "seed must be a whole number from 0 to 9.0072e+15, got 0.5;"),
    ],
)
def test_wrong_folds(connection: duckdb.DuckDBPyConnection, call: str, sentence: str) -> None:
    said = complaint(connection, f"SELECT {call} FROM range(3)")
    assert said.startswith(f"fold: {sentence}")
    assert said.endswith(".")


def test_a_null_key_has_no_fold(connection: duckdb.DuckDBPyConnection) -> None:
    assert connection.execute("SELECT fold(NULL), fold(NULL::DATE, 3, 1)").fetchall() == [
        (None, None)
    ]


def test_folds_are_nearly_equal_and_the_seed_deals_anew(
    connection: duckdb.DuckDBPyConnection,
) -> None:
    """100,000 keys in 10 folds: each within 5 standard deviations (95) of 10,000."""
    keys = "(SELECT fold(i) AS a, fold(i, seed := 1) AS b FROM range(100000) AS t(i))"
    rows = connection.execute(f"SELECT a, b, count(*) FROM {keys} GROUP BY ALL").fetchall()
    for place in (0, 1):
        for part in range(1, 11):
            assert abs(sum(row[2] for row in rows if row[place] == part) - 10_000) < 475
    # Independent deals: a hundred cells of a thousand.
    assert len(rows) == 100 and all(abs(row[2] - 1000) < 160 for row in rows)
