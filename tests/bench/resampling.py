"""Bootstrap intervals against the engine's own median and scipy's bootstrap; one large group."""

import tempfile
from pathlib import Path

import duckdb
import numpy as np
import pandas as pd
import scipy.stats
from measuring import GROUPS, Figure, fill, grouped, seconds, session_with_table
from memory import added

RESAMPLES = 2_000
INTERVAL = f"bootstrap_interval(x, 'trimmed_mean(0.2)', method := 'bca', resamples := {RESAMPLES})"
OTHERS = ("median", "mean", "sd")
PROMISED = {"few": "≤ 100", "many": "≤ 150"}
SAMPLED = 3
"""Groups that scipy is timed on."""
ONE_GROUP = 2_000_000


def measure(rows: int) -> list[Figure]:
    """Ratios by number of groups, then time and memory of one group of two million."""
    figures = []
    with session_with_table(rows) as session:
        for size in (50, 2000):  # compiled before the clock runs
            session.query(f"SELECT bootstrap_interval(x) FROM (SELECT x FROM bench.t LIMIT {size})")
        for words, key in GROUPS.items():
            run = grouped(session, "median(x)", key)
            run()
            native = min(seconds(run) for _ in range(3))
            taken = seconds(grouped(session, INTERVAL, key))
            what = f"bootstrap_interval, trimmed mean, bca / median(x), {words}"
            figures.append(Figure(what, taken / native, "×", PROMISED[key]))
            if key == "few":
                sample = session.query(f"SELECT few, x FROM bench.t WHERE few < {SAMPLED}")
                ratio = _scipy_seconds(sample.arrow().to_pandas())
                ratio *= 1_000 / SAMPLED / taken
                what = f"scipy's percentile bootstrap / bootstrap_interval, {words}"
                figures.append(Figure(what, ratio, "×", "≥ 100"))
                for text in OTHERS:
                    sql = f"bootstrap_interval(x, '{text}')"
                    session.query(f"SELECT {sql} FROM (SELECT x FROM bench.t LIMIT 2000)")
                    ratio = seconds(grouped(session, sql, key)) / native
                    figures.append(Figure(f"{sql} / median(x), {words}", ratio, "×"))
    return figures + _one_group()


def _scipy_seconds(frame: pd.DataFrame) -> float:
    """Seconds of scipy for the groups 0 … SAMPLED − 1."""
    total = 0.0
    for group in range(SAMPLED):
        x = frame.loc[frame["few"] == group, "x"].to_numpy()
        total += seconds(
            lambda x=x: scipy.stats.bootstrap(
                (x,),
                lambda sample, axis: scipy.stats.trim_mean(sample, 0.2, axis=axis),
                n_resamples=RESAMPLES,
                method="percentile",
                batch=100,
                rng=np.random.default_rng(0),
            )
        )
    return total


def _one_group() -> list[Figure]:
    """Time at one and two million values, and the memory above the column itself."""
    figures = []
    with session_with_table(ONE_GROUP) as session:
        session.query("SELECT bootstrap_interval(x) FROM (SELECT x FROM bench.t LIMIT 2000)")
        taken = [
            seconds(
                lambda n=n: session.query(
                    f"SELECT {INTERVAL} FROM (SELECT x FROM bench.t LIMIT {n})"
                )
            )
            for n in (ONE_GROUP // 2, ONE_GROUP)
        ]
    what = f"bootstrap_interval, one group of {ONE_GROUP:,}"
    figures.append(Figure(what, taken[1], "s"))
    figures.append(Figure(f"{what} / of half as many", taken[1] / taken[0], "×", "≤ 2.2"))
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "bench.duckdb"
        with duckdb.connect(path) as connection:
            fill(connection, ONE_GROUP)
        extra = added(
            path, f"SELECT {INTERVAL} FROM bench.t", f"SELECT {INTERVAL} FROM range(9) t(x)"
        )
    figures.append(Figure(f"{what}, memory above the process", extra, "MiB", "≤ 500"))
    return figures
