"""Peak memory of a query in a process of its own, beside that of the engine's median."""

import resource
import subprocess
import sys
import tempfile
from pathlib import Path

import duckdb
from measuring import GROUPS, Figure, fill

QUERIES = {
    "median": "SELECT {key}, median(x) FROM bench.t GROUP BY {key}",
    "trimmed_mean": "SELECT {key}, trimmed_mean(x, 0.1) FROM bench.t GROUP BY {key}",
    "robust_summary": "FROM robust_summary('bench.t', 'x', by := '{key}')",
}


def measure(rows: int) -> list[Figure]:
    """What each query adds to its process, less what median adds, in sizes of the column."""
    column = rows * 8 / 2**20
    figures = []
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "bench.duckdb"
        with duckdb.connect(path) as connection:
            fill(connection, rows)
        for words, key in GROUPS.items():
            added = {name: added(path, sql.format(key=key)) for name, sql in QUERIES.items()}
            for name in ("trimmed_mean", "robust_summary"):
                above = (added[name] - added["median"]) / column
                figures.append(Figure(f"{name} above median(x), {words}", above, "× column", "≤ 3"))
    return figures


def added(path: Path, sql: str, *warm: str) -> float:
    """MiB by which the query raises the peak of a fresh process, kernels loaded beforehand."""
    answer = subprocess.run(
        [sys.executable, __file__, str(path), sql, *warm],
        check=True,
        capture_output=True,
        text=True,
    )
    return float(answer.stdout)


def _child(path: str, sql: str, *warm: str) -> None:
    from midspread.engine import Session

    with Session(use_store=False, threads=2, sources={"bench": Path(path)}) as session:
        session.query("SELECT trimmed_mean(x, 0.1) FROM (SELECT x FROM bench.t LIMIT 9)")
        session.query("FROM robust_summary('(SELECT x FROM bench.t LIMIT 9)', 'x')")
        for other in warm:
            session.query(other)
        before = _peak()
        session.query(sql)
        print(_peak() - before)


def _peak() -> float:
    """Peak memory of this process so far, MiB."""
    status = Path("/proc/self/status")
    if status.exists():  # getrusage counts the peak of the process that started this one, too
        line = next(line for line in status.read_text().splitlines() if line.startswith("VmHWM"))
        return int(line.split()[1]) / 2**10
    unit = 2**20 if sys.platform == "darwin" else 2**10
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / unit


if __name__ == "__main__":
    _child(*sys.argv[1:])
