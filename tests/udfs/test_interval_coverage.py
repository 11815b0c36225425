"""How often intervals cover, in small; tests/bench/interval_coverage.py has the whole table."""

import duckdb
import numpy as np
import pytest

from tests.bench.interval_coverage import DISTRIBUTIONS, shares, target

TRIMMED = "trimmed_mean(0.2)"


@pytest.mark.parametrize("distribution", DISTRIBUTIONS)
def test_trimmed_mean_of_fifty(connection: duckdb.DuckDBPyConnection, distribution: str) -> None:
    """2,000 data sets: a share is good to half a point."""
    generator = np.random.default_rng([list(DISTRIBUTIONS).index(distribution), 50])
    x = DISTRIBUTIONS[distribution](generator, (2000, 50)) - target(TRIMMED, distribution)
    found = shares(connection, x, TRIMMED, 399, ("bca", "studentized"))
    assert all(0.93 <= share <= 0.97 for share in found.values()), found
