"""Rank correlation and robust lines on one large group."""

import duckdb
import numpy as np
from measuring import Figure, seconds
from scipy import stats

from midspread.udfs import register

CALLS = ("kendall_tau(y, x)", "theil_sen(y, x)", "repeated_median(y, x)")
LARGEST = 1_000_000
"""Points; all pairs of them would be 500 thousand million."""


def measure(rows: int) -> list[Figure]:
    """Seconds for up to a million points, growth from a tenth of them, and scipy's tau beside."""
    size = min(rows, LARGEST)
    generator = np.random.default_rng(8)
    x = generator.normal(size=size)
    y = 2 * x + generator.standard_t(3, size)
    figures = []
    with duckdb.connect(config={"threads": 2}) as connection:
        register(connection)
        connection.register("drawn", {"y": y, "x": x})
        connection.execute("CREATE TABLE points AS FROM drawn")
        connection.execute(f"CREATE TABLE tenth AS FROM drawn LIMIT {size // 10}")
        for call in CALLS:
            whole, tenth = (
                lambda table=table, call=call: connection.execute(
                    f"SELECT {call} FROM {table}"
                ).fetchall()
                for table in ("points", "tenth")
            )
            tenth()  # compiles
            small = min(seconds(tenth) for _ in range(3))
            large = min(seconds(whole) for _ in range(3))
            figures.append(Figure(f"{call}, one group of {size:,}", large, "s"))
            figures.append(Figure(f"{call}, {size:,} rows / {size // 10:,} rows", large / small))
            if call.startswith("kendall"):
                theirs = min(seconds(lambda: stats.kendalltau(y, x)) for _ in range(3))
                figures.append(Figure(f"scipy kendalltau / {call}", theirs / large))
    return figures
