"""How often 95 % intervals cover: ``python tests/bench/interval_coverage.py``.

For each statistic, size and distribution, data sets are drawn with fixed seeds, each a group of
one query; printed is the share of intervals that hold the statistic's own value in that
distribution. With 2,000 sets a share of 95 % is good to ± 1 %.
"""

import argparse
from collections.abc import Callable, Sequence
from typing import Final

import duckdb
import numpy as np
import pyarrow as pa
import scipy.integrate
import scipy.stats
from rich.console import Console
from rich.table import Table

from midspread.udfs import register

METHODS: Final = ("percentile", "basic", "normal", "bca", "studentized")
STATISTICS: Final = ("mean", "median", "trimmed_mean(0.2)")
SIZES: Final = (5, 10, 20, 50, 200)
WITH_ERROR: Final = ("mean", "trimmed_mean(0.2)")

Draw = Callable[[np.random.Generator, tuple[int, int]], np.ndarray]


def _contaminated(generator: np.random.Generator, shape: tuple[int, int]) -> np.ndarray:
    """Normal, a tenth of it with ten times the spread."""
    wild = generator.uniform(size=shape) < 0.1
    return generator.normal(size=shape) * np.where(wild, 10.0, 1.0)


DISTRIBUTIONS: Final[dict[str, Draw]] = {
    "normal": lambda g, shape: g.normal(size=shape),
    "log-normal": lambda g, shape: g.lognormal(size=shape),
    "t, 3 degrees": lambda g, shape: g.standard_t(3, size=shape),
    "10 % contaminated": _contaminated,
}


def target(statistic: str, distribution: str) -> float:
    """The statistic's own value in the distribution; all but one are symmetric around 0."""
    if distribution != "log-normal":
        return 0.0
    if statistic == "mean":
        return float(np.exp(0.5))
    if statistic == "median":
        return 1.0
    low, high = scipy.stats.lognorm.ppf((0.2, 0.8), 1.0)
    inner, _ = scipy.integrate.quad(lambda x: x * scipy.stats.lognorm.pdf(x, 1.0), low, high)
    return inner / 0.6


def shares(
    connection: duckdb.DuckDBPyConnection,
    x: np.ndarray,
    statistic: str,
    resamples: int,
    methods: Sequence[str] = METHODS,
) -> dict[str, float]:
    """Share of intervals, by method, that cover; x holds a data set a row."""
    sets, n = x.shape
    table = pa.table({"g": np.repeat(np.arange(sets), n), "x": x.reshape(-1)})
    connection.register("sets", table)
    methods = [m for m in methods if m != METHODS[-1] or statistic in WITH_ERROR]
    calls = ", ".join(
        f"bootstrap_interval(x, '{statistic}', method := '{method}', resamples := {resamples})"
        for method in methods
    )
    rows = connection.execute(f"SELECT {calls} FROM sets GROUP BY g").fetchall()
    connection.unregister("sets")
    return {
        method: float(np.mean([_covers(row[i]) for row in rows]))
        for i, method in enumerate(methods)
    }


def _covers(found: dict[str, float | None]) -> bool:
    """Whether the limits hold the target, which the data are centred on; no limits hold nothing."""
    lower, upper = found["lower"], found["upper"]
    return lower is not None and upper is not None and lower <= 0.0 <= upper


def main() -> None:
    """Print the table, one row for each statistic, size and distribution."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--sets", type=int, default=2_000)
    parser.add_argument("--resamples", type=int, default=2_000)
    chosen = parser.parse_args()
    table = Table("statistic", "distribution", "n", *METHODS, title="share that covers, %")
    with duckdb.connect(config={"threads": 2}) as connection:
        register(connection)
        for statistic in STATISTICS:
            for place, (name, draw) in enumerate(DISTRIBUTIONS.items()):
                for n in SIZES:
                    generator = np.random.default_rng([place, n])
                    x = draw(generator, (chosen.sets, n)) - target(statistic, name)
                    found = shares(connection, x, statistic, chosen.resamples)
                    percent = [f"{100 * found[m]:.1f}" if m in found else "" for m in METHODS]
                    table.add_row(statistic, name, str(n), *percent)
                table.add_section()
    Console(width=100).print(table)


if __name__ == "__main__":
    main()
