"""How often 95 % intervals from resampled units cover: ``python tests/bench/unit_coverage.py``.

The mean of rows within units of equal size; units differ in a normal or a log-normal way. Fixed
seeds; the standard error of a share near 0.9 from 2,000 data sets is 0.7 points.
"""

import argparse
import math

import duckdb
import numpy as np
import pyarrow as pa
from rich.console import Console
from rich.table import Table

from midspread.udfs import register

METHODS = ("percentile", "basic", "normal", "bca")
ROWS = 8


def covered(
    connection: duckdb.DuckDBPyConnection, shape: str, units: int, sets: int, method: str
) -> float:
    """The share of data sets whose interval holds the true mean, 0."""
    generator = np.random.default_rng([units, len(shape)])
    between = generator.normal(0.0, 1.0, (sets, units, 1))
    if shape == "log-normal":
        between = np.exp(between) - math.exp(0.5)
    x = between + generator.normal(0.0, 1.0, (sets, units, ROWS))
    owner = np.broadcast_to(np.arange(units)[:, np.newaxis], x.shape)
    group = np.broadcast_to(np.arange(sets)[:, np.newaxis, np.newaxis], x.shape)
    table = pa.table({"g": group.ravel(), "unit": owner.ravel(), "x": x.ravel()})
    connection.register("sets", table)
    ((share,),) = connection.execute(
        "SELECT avg(CAST(r.lower <= 0 AND r.upper >= 0 AS INTEGER)) FROM (SELECT "
        f"bootstrap_units(x, unit, 'mean', method := '{method}') AS r FROM sets GROUP BY g)"
    ).fetchall()
    connection.unregister("sets")
    return float(share)


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--sets", type=int, default=2000)
    sets = parser.parse_args().sets
    table = Table("units differ", "units", *METHODS)
    with duckdb.connect() as connection:
        register(connection)
        for shape in ("normal", "log-normal"):
            for units in (5, 10, 20, 30, 50):
                shares = (covered(connection, shape, units, sets, name) for name in METHODS)
                table.add_row(shape, str(units), *(f"{100 * share:.1f} %" for share in shares))
    Console(width=100).print(table)


if __name__ == "__main__":
    main()
