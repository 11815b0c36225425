"""Whole processes: a kept answer, the first call of a function ever, the second process."""

import os
import shutil
import statistics
import subprocess
import sys
import tempfile
from pathlib import Path

import duckdb
from measuring import Figure, seconds

QUERY = "SELECT k, trimmed_mean(x, 0.1) AS middle FROM 'small.parquet' GROUP BY k"
ROUNDS = 7


def measure(_rows: int) -> list[Figure]:
    """Times of the installed command against ``python -c "import duckdb, sqlglot"``."""
    with tempfile.TemporaryDirectory() as folder:
        work = Path(folder)
        duckdb.sql(
            "SELECT i % 5 AS k, CAST(hash(i) % 1000 AS DOUBLE) AS x FROM range(10000) r(i)"
        ).write_parquet(str(work / "small.parquet"))
        environment = {**os.environ, "XDG_CACHE_HOME": str(work / "cache")}
        # A file just written is not trusted to be unchanged; age it.
        os.utime(work / "small.parquet", (1, 1))

        program = shutil.which("midspread", path=str(Path(sys.executable).parent))
        assert program is not None

        def command(*arguments: str) -> float:
            return seconds(
                lambda: subprocess.run(
                    [program, *arguments],
                    cwd=work,
                    env=environment,
                    check=True,
                    capture_output=True,
                )
            )

        def imports() -> float:
            return seconds(
                lambda: subprocess.run(
                    [sys.executable, "-c", "import duckdb, sqlglot"], check=True, cwd=work
                )
            )

        imports()
        cold = command("query", QUERY)
        second = command("query", "--recompute", QUERY)
        command("query", QUERY)
        ratios = [command("query", QUERY) / imports() for _ in range(ROUNDS)]
    return [
        Figure("a kept answer / import duckdb, sqlglot", statistics.median(ratios), "×", "≤ 2.5"),
        Figure("first call of a function ever, compiled", cold, "s", "≤ 5"),
        Figure("small query in the second process", second, "s", "≤ 1.5"),
    ]
