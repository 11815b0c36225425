"""Bootstrap intervals: promises about NULL, NaN, ties, threads, seeds, and wrong arguments."""

import math
import re
from typing import Any

import duckdb
import numpy as np
import pytest

from midspread.udfs import Control, register
from midspread.udfs.binding.computing import Work
from midspread.udfs.grouped import Groups, Stopped
from midspread.udfs.resampling import draws as drawing
from midspread.udfs.resampling.draws import group_draws
from midspread.udfs.resampling.intervals import METHODS
from midspread.udfs.resampling.statistics import read_statistic
from tests.udfs.calling import bits

FIELDS = ["estimate", "lower", "upper", "se", "bias", "n", "resamples"]
STATISTICS = ("trimmed_mean(0.2)", "winsorized_mean(0.1)", "mean", "median", "trimean", "sd")

VISITS = """
    SELECT CASE WHEN i % 4 = 0 THEN 'one' ELSE 'g' || (i // 40 % 50) END AS route,
        exp((hash(i) % 6000) / 1000.0) AS dwell_s, 1 + hash(i * 31) % 9 AS boardings
    FROM range(8000) AS t(i)
"""
CALLS = ", ".join(
    [
        *(f"bootstrap_interval(dwell_s, '{name}', resamples := 60)" for name in STATISTICS),
        *(f"bootstrap_interval(dwell_s, method := '{m}', resamples := 60)" for m in METHODS),
        "bootstrap_interval_yx(dwell_s, boardings, 'spearman', resamples := 20)",
        "jackknife(dwell_s)",
        "jackknife(dwell_s, 'sd')",
    ]
)


def grouped(connection: duckdb.DuckDBPyConnection, source: str) -> Any:
    query = f"SELECT route, {CALLS} FROM {source} GROUP BY route ORDER BY route"
    return bits(connection.execute(query).fetchall())


@pytest.fixture(scope="module")
def reference() -> Any:
    with duckdb.connect(config={"threads": 1}) as connection:
        register(connection, threads=1)
        return grouped(connection, f"({VISITS})")


@pytest.mark.parametrize("threads", [2, 4])
@pytest.mark.parametrize("order", ["hash(dwell_s)", "dwell_s DESC"])
def test_same_bits(reference: Any, threads: int, order: str) -> None:
    with duckdb.connect(config={"threads": threads}) as connection:
        register(connection, threads=threads)
        connection.execute(f"CREATE TABLE visits AS {VISITS} ORDER BY {order}")
        assert grouped(connection, "visits") == reference
        connection.execute(
            "INSERT INTO visits SELECT 'other ' || i % 400, i, i % 7 FROM range(3000) t(i)"
        )
        crowd = [row for row in grouped(connection, "visits") if not row[0].startswith("other")]
        assert crowd == reference


def one(x: np.ndarray, text: str, resamples: int, seed: float = 0.0, threads: int = 1) -> Any:
    groups = Groups(np.asarray(x, dtype=np.float64), np.array([0, len(x)]))
    work = Work(Control(), threads)
    return group_draws(groups, read_statistic("test", text), resamples, np.array([seed]), work)[0]


@pytest.mark.parametrize("text", [*STATISTICS, "trimmed_mean(0.0001)"])
@pytest.mark.parametrize("n", [50, 3000, 9000])
def test_large_groups_are_shared_out_without_a_trace(
    monkeypatch: pytest.MonkeyPatch, generator: np.random.Generator, text: str, n: int
) -> None:
    x = generator.lognormal(size=n)
    whole = one(x, text, 101)
    monkeypatch.setattr(drawing, "_LARGE", 1)
    monkeypatch.setattr(drawing, "_PIECE", 17 * n)
    assert one(generator.permutation(x), text, 101, threads=3).tobytes() == whole.tobytes()
    assert one(x, text, 40).tobytes() == whole[:40].tobytes()
    assert (one(x, text, 101, seed=1.0) == whole).mean() < 0.5


@pytest.mark.parametrize("method", METHODS)
def test_tiny_groups_are_null(connection: duckdb.DuckDBPyConnection, method: str) -> None:
    rows = connection.execute(
        f"SELECT g, bootstrap_interval(x, method := '{method}') FROM (VALUES (0, NULL), (1, 3.5), "
        "(2, 1.0), (2, 2.0), (3, 7.0), (3, NULL)) t(g, x) GROUP BY g ORDER BY g"
    ).fetchall()
    assert [row[1] is None for row in rows] == [True, True, False, True]
    assert rows[2][1]["n"] == 2 and rows[2][1]["estimate"] == 1.5


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("value", [0.1, -7.3, 1e300, 1e9 + 0.1, math.inf])
def test_equal_values_leave_no_width(
    connection: duckdb.DuckDBPyConnection, method: str, value: float
) -> None:
    texts = ["trimmed_mean(0.2)", "mean"]
    if method != "studentized":
        texts += ["median", "winsorized_mean(0.1)", "quantile_hf(0.9)", "huber_location"]
    for text in texts:
        for n in (2, 5, 40, 1200):
            ((found,),) = connection.execute(
                f"SELECT bootstrap_interval(x, '{text}', method := '{method}', resamples := 50) "
                "FROM (SELECT $1::DOUBLE AS x FROM range($2))",
                [value, n],
            ).fetchall()
            assert (found["estimate"], found["lower"], found["upper"]) == (value,) * 3, text
            assert (found["se"], found["bias"]) == (0.0, 0.0)


def test_nan_and_infinities(connection: duckdb.DuckDBPyConnection) -> None:
    """NaN spoils its group alone; an infinite value that is cut does little harm."""
    rows = connection.execute(
        "SELECT g, bootstrap_interval(x), bootstrap_interval(x, 'median'), "
        "bootstrap_interval(x, 'mean', method := 'studentized') FROM ("
        "SELECT 0 AS g, i::DOUBLE AS x FROM range(40) t(i) UNION ALL "
        "SELECT 1, CASE WHEN i = 3 THEN 'nan'::DOUBLE ELSE i END FROM range(40) t(i) UNION ALL "
        "SELECT 2, CASE WHEN i = 39 THEN 'inf'::DOUBLE ELSE i END FROM range(40) t(i)"
        ") GROUP BY g ORDER BY g"
    ).fetchall()
    for found in rows[1][1:]:
        assert all(math.isnan(found[name]) for name in FIELDS[:4]) and found["n"] == 40
    for clean, wild in zip(rows[0][1:3], rows[2][1:3], strict=True):
        assert wild["lower"] == pytest.approx(clean["lower"], abs=1.0)
        assert wild["upper"] == pytest.approx(clean["upper"], abs=1.0)
    assert rows[2][3]["estimate"] == math.inf


def test_each_group_its_own_parameters(connection: duckdb.DuckDBPyConnection) -> None:
    values = "(SELECT unnest([3.0, 1, 8, 2, 5, 9, 4, 4, 7, 20]) AS x)"
    settings = [
        ("median", 0.9, "percentile", 300, 1),
        ("mean", 0.9, "percentile", 300, 1),
        ("mean", 0.5, "studentized", 200, 7),
        ("sd", 0.95, "bca", 100, 0),
    ]
    alone = [
        connection.execute(
            f"SELECT bootstrap_interval(x, '{s}', {c}, '{m}', {r}, {d}) FROM {values}"
        ).fetchall()[0][0]
        for s, c, m, r, d in settings
    ]
    rows = ", ".join(
        f"({i}, '{s}', {c}, '{m}', {r}, {d})" for i, (s, c, m, r, d) in enumerate(settings)
    )
    together = connection.execute(
        "SELECT bootstrap_interval(x, any_value(s), any_value(c), any_value(m), any_value(r), "
        f"any_value(d)) FROM {values}, (VALUES {rows}) t(i, s, c, m, r, d) GROUP BY i ORDER BY i"
    ).fetchall()
    assert bits([row[0] for row in together]) == bits(alone)


WRONG = {
    "confidence := 1.5": "confidence must be a number above 0 and below 1, got 1.5",
    "confidence := 0": "confidence must be a number above 0 and below 1, got 0",
    "confidence := NULL": "confidence must be a number above 0 and below 1, got NULL",
    "resamples := 0": "resamples must be a whole number from 1 to 1e\\+06, got 0",
    "resamples := 10.5": "resamples must be a whole number from 1 to 1e\\+06, got 10.5",
    "method := 'magic'": "method must be 'percentile', 'basic', .*got 'magic'",
    "seed := -1": "seed must be a whole number from 0 to .*got -1",
    "seed := NULL": "seed must be .*got NULL",
    "statistic := 'letter_values'": "statistic must be one of mean, median, sd, .*got 'letter",
    "statistic := 'trimmed_mean(0.7)'": "share must be a number from 0 to 0.5, got 0.7",
    "statistic := 'median', method := 'studentized'": "studentized' needs a statistic with a "
    "standard error, which are mean and trimmed_mean with a share below 0.5, got 'trimmed_mean",
}


@pytest.mark.parametrize("given", WRONG)
def test_wrong_arguments_get_one_sentence(
    connection: duckdb.DuckDBPyConnection, given: str
) -> None:
    with pytest.raises(duckdb.Error) as caught:
        connection.execute(f"SELECT bootstrap_interval(x, {given}) FROM range(9) t(x)").fetchall()
    assert re.search(f"bootstrap_interval: .*{WRONG[given]}", str(caught.value))


def test_text_for_numbers_is_refused(connection: duckdb.DuckDBPyConnection) -> None:
    with pytest.raises(duckdb.Error, match="bootstrap_interval: x must be a number"):
        connection.execute("SELECT bootstrap_interval('a')").fetchall()


def test_a_common_shift_keeps_the_digits(connection: duckdb.DuckDBPyConnection) -> None:
    """In sixteenths, so that the shift itself is exact."""
    for text in ("trimmed_mean(0.2)", "mean", "median", "winsorized_mean(0.2)"):
        near, far = (
            connection.execute(
                f"SELECT bootstrap_interval(floor(hash(i) % 4000) / 16 + {by}, '{text}', "
                "resamples := 200) FROM range(1500) t(i)"
            ).fetchall()[0][0]
            for by in (0, 2**30)
        )
        # The draws differ, as the values do; their spread does not.
        assert far["se"] == pytest.approx(near["se"], rel=0.3)
        assert far["lower"] - 2**30 == pytest.approx(near["lower"], abs=2 * near["se"])
        x = np.floor(np.random.default_rng(1).uniform(0, 4000, 1500)) / 16
        drawn = one(x + 2.0**30, text, 50) - 2.0**30
        assert np.abs(drawn * 16 * 1500 - np.rint(drawn * 16 * 1500)).max() < 0.5


def test_progress_counts_each_value_once() -> None:
    for n, text in ((50, "mean"), (70_000, "trimmed_mean(0.2)"), (3000, "median"), (400, "sd")):
        work = Work(Control(), 2)
        x = np.random.default_rng(1).normal(size=n)
        groups = Groups(x, np.array([0, n]))
        group_draws(groups, read_statistic("test", text), 1000, np.zeros(1), work)
        assert work.control.done == n


@pytest.mark.parametrize("n", [300, 80_000])
def test_a_request_to_stop_is_heard(n: int) -> None:
    control = Control()
    control.stop()
    groups = Groups(np.random.default_rng(1).normal(size=n), np.array([0, n]))
    with pytest.raises(Stopped):
        group_draws(groups, read_statistic("test", "sd"), 2000, np.zeros(1), Work(control, 2))
    assert control.done == 0
