"""Timing in turn, and the printed table."""

import contextlib
import statistics
import tempfile
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

import duckdb
from rich.console import Console
from rich.table import Table

from midspread.engine import Session

GROUPS = {"1,000 groups": "few", "200,000 groups": "many"}
"""Grouping columns of the benchmark table by what they mean."""


@dataclass(frozen=True)
class Figure:
    """One measured figure: what it is, the value, its unit, and the promised limit if any."""

    what: str
    value: float
    unit: str = "×"
    promised: str = ""


@contextlib.contextmanager
def session_with_table(rows: int, *, threads: int = 2) -> Iterator[Session]:
    """A session that keeps no answers, with the table ``bench.t(few, many, x)`` attached."""
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "bench.duckdb"
        with duckdb.connect(path) as connection:
            fill(connection, rows)
        with Session(use_store=False, threads=threads, sources={"bench": path}) as session:
            yield session


def fill(connection: duckdb.DuckDBPyConnection, rows: int) -> None:
    """Create table `t` with so many rows.

    x is right-skewed (about log-normal), from a hash of the row number: the same in every run.
    """
    uniform = " + ".join(f"(hash(i * {k} + 1) % 1000003) / 1000003.0" for k in (3, 5, 7, 11))
    connection.execute(
        "CREATE OR REPLACE TABLE t AS SELECT CAST(hash(i) % 1000 AS INTEGER) AS few, "
        "CAST(hash(i + 7) % 200000 AS INTEGER) AS many, "
        f"CAST(30 * exp(0.9 * ({uniform} - 2)) AS DOUBLE) AS x FROM range({rows}) r(i)"
    )


def in_turn(
    reference: Callable[[], object], others: dict[str, Callable[[], object]], rounds: int = 5
) -> dict[str, float]:
    """Median ratio of each to the reference; each round runs all of them once, after a warm-up."""
    ratios: dict[str, list[float]] = {name: [] for name in others}
    for round_number in range(rounds + 1):
        base = seconds(reference)
        for name, run in others.items():
            ratio = seconds(run) / base
            if round_number:
                ratios[name].append(ratio)
    return {name: statistics.median(values) for name, values in ratios.items()}


def seconds(run: Callable[[], object]) -> float:
    """Wall time of one call."""
    start = time.perf_counter()
    run()
    return time.perf_counter() - start


def grouped(session: Session, expressions: str, key: str) -> Callable[[], object]:
    """A call that computes aggregates by group."""
    sql = f"SELECT {key}, {expressions} FROM bench.t GROUP BY {key}"
    return lambda: session.query(sql)


def print_figures(title: str, figures: list[Figure]) -> None:
    """Print one section."""
    table = Table(title=title, title_justify="left")
    table.add_column("what")
    table.add_column("measured", justify="right")
    table.add_column("promised", justify="right")
    for figure in figures:
        table.add_row(figure.what, f"{figure.value:.2f} {figure.unit}", figure.promised)
    Console(width=110).print(table)
