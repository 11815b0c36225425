"""`bootstrap_draws`: the very draws of `bootstrap_interval`."""

import math

import duckdb
import numpy as np
import pytest

from tests.udfs.table_calls import answer, complaint


@pytest.mark.parametrize(
    "statistic", ["mean", "median", "trimmed_mean(0.1)", "qn_scale", "quantile_hf(0.9)", "sd"]
)
@pytest.mark.parametrize("seed", [0, 3])
def test_they_are_those_of_the_interval(
    larkmoor: duckdb.DuckDBPyConnection, statistic: str, seed: int
) -> None:
    """Order statistics 10 and 190 of 199 draws are the 90 % percentile limits, to the bit."""
    more = f"'{statistic}', resamples := 199, seed := {seed}"
    drawn = larkmoor.execute(
        f"SELECT route, list(value ORDER BY value), count(*), stddev(value) FROM bootstrap_draws("
        f"'visits', 'dwell_s', by := 'route', statistic := {more}) GROUP BY 1 ORDER BY 1"
    ).fetchall()
    intervals = larkmoor.execute(
        f"SELECT bootstrap_interval(dwell_s, {more}, method := 'percentile', confidence := 0.9) "
        "FROM visits GROUP BY route ORDER BY route"
    ).fetchall()
    assert len(drawn) == 3
    for (_, values, count, sd), (interval,) in zip(drawn, intervals, strict=True):
        assert count == 199
        assert (values[9], values[189]) == (interval["lower"], interval["upper"])
        assert sd == pytest.approx(interval["se"], rel=1e-10)


def test_rows_and_order(larkmoor: duckdb.DuckDBPyConnection) -> None:
    found = answer(
        larkmoor, "FROM bootstrap_draws('visits', 'dwell_s', by := ['stop'], resamples := 7)"
    )
    assert list(found[0]) == ["stop", "resample", "value"]
    assert [row["resample"] for row in found] == [*range(1, 8)] * 5
    assert [row["stop"] for row in found[::7]] == ["stop 0", "stop 1", "stop 2", "stop 3", None]
    longer = answer(
        larkmoor, "FROM bootstrap_draws('visits', 'dwell_s', by := ['stop'], resamples := 9)"
    )
    assert [row for row in longer if row["resample"] <= 7] == found


def test_groups_without_draws(connection: duckdb.DuckDBPyConnection) -> None:
    rows = "(1, 2.5), (2, NULL), (3, 4), (3, 4), (4, ''nan''::DOUBLE), (4, 1)"
    found = answer(
        connection,
        f"FROM bootstrap_draws('(FROM (VALUES {rows}) AS t(g, x))', 'x', by := 'g', "
        "resamples := 3)",
    )
    assert [row["g"] for row in found] == [3, 3, 3, 4, 4, 4]
    assert [row["value"] for row in found[:3]] == [4.0] * 3
    assert all(math.isnan(row["value"]) for row in found[3:])


def test_whatever_the_order_of_rows(
    connection: duckdb.DuckDBPyConnection, generator: np.random.Generator
) -> None:
    x = np.round(generator.lognormal(3.0, 1.0, 3000), 1)
    sql = "SELECT unnest(?) AS x, unnest(?) AS g"
    answers = []
    for order in (np.arange(3000), generator.permutation(3000)):
        connection.execute(
            f"CREATE OR REPLACE TEMP TABLE one AS {sql}",
            [x[order].tolist(), (order % 9).tolist()],
        )
        for threads in (1, 2, 4):
            connection.execute(f"SET threads = {threads}")
            answers.append(
                answer(connection, "FROM bootstrap_draws('one', 'x', by := 'g', resamples := 50)")
            )
    assert all(found == answers[0] for found in answers)


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        ("resamples := 0", "resamples must be a whole number from 1 to 1e+06, got 0;"),
        ("resamples := NULL", "resamples must be a whole number from 1 to 1e+06, got NULL;"),
        ("seed := 0.5", "seed must be a whole number from 0 to"),
        ("statistic := 'mode'", "statistic must be one of mean, median, sd,"),
        ("statistic := NULL", "statistic must be a text, got NULL;"),
        ("by := 'resample'", "by names resample, which is also a column of the result;"),
    ],
)
def test_wrong_arguments(
    larkmoor: duckdb.DuckDBPyConnection, arguments: str, sentence: str
) -> None:
    said = complaint(larkmoor, f"FROM bootstrap_draws('visits', 'dwell_s', {arguments})")
    assert said.startswith(f"bootstrap_draws: {sentence}")
    assert said.endswith(".")
