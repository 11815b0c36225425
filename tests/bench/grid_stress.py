"""The store under stress: ``python tests/bench/grid_stress.py [kills N] [together S] [scale]``.

``kills``: commands are killed (SIGKILL) at random moments; afterwards the store opens, no value
that was confirmed is missing, and each grid is the old or the new one whole. ``together``: eight
processes enter, refresh and query one store at once for S seconds; no error, no update lost.
``scale``: 500 grids in a chain and in a fan, 2,000 files, a grid of 5 million rows.
"""

import os
import random
import signal
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import duckdb

COMMAND = (sys.executable, "-m", "midspread.cli.main")


def run(*arguments: str, check: bool = True) -> str:
    """One command; its output."""
    done = subprocess.run([*COMMAND, *arguments], capture_output=True, text=True, check=False)
    if check and done.returncode != 0:
        raise SystemExit(f"{' '.join(arguments)} failed: {done.stderr}")
    return done.stdout


def prepared(folder: Path) -> None:
    """A store with a derived grid, an entered one and a database to push to."""
    os.chdir(folder)
    duckdb.sql(
        "COPY (SELECT i % 50 AS route, i / 8.0 AS dwell_s FROM range(200000) AS rows(i))"
        " TO 'january.parquet' (FORMAT parquet)"
    )
    with duckdb.connect("warehouse.duckdb") as made:
        made.execute("CREATE TABLE routes AS SELECT 1 AS route")
    run("keep", "dwell", "SELECT route, count(*) AS n FROM '*.parquet' GROUP BY route")
    run("enter", "limits", "--columns", "k INTEGER, v INTEGER", "--key", "k")
    run("attach", "wh=warehouse.duckdb")
    run("push", "dwell", "wh.main.dwell")


def kills(count: int) -> None:
    """Kill commands at random moments and look at the store after each."""
    chance = random.Random(20310101)
    with tempfile.TemporaryDirectory() as scratch:
        prepared(Path(scratch))
        confirmed = 0
        months = 1
        killed = 0
        for attempt in range(count):
            kind = chance.choice(("enter", "refresh", "keep", "column", "push"))
            if kind == "refresh":
                months += 1
                duckdb.sql(
                    f"COPY (SELECT i % 50 AS route, i / 8.0 AS dwell_s FROM range({1000 * months})"
                    f" AS rows(i)) TO 'month_{months}.parquet' (FORMAT parquet)"
                )
            arguments = {
                "enter": ("enter", "limits", f"k={attempt}", f"v={attempt}"),
                "refresh": ("refresh",),
                "keep": (
                    *("keep", "dwell", "--replace"),
                    f"SELECT route, count(*) + {attempt} AS n FROM '*.parquet' GROUP BY route",
                ),
                "column": ("column", "dwell", f"c{attempt} AS (n + {attempt})"),
                "push": ("push", "dwell", "wh.main.dwell", "--mode", "replace", "--stale-ok"),
            }[kind]
            process = subprocess.Popen(
                [*COMMAND, *arguments], stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL
            )
            time.sleep(chance.uniform(0.05, 1.2))
            if process.poll() is None:
                process.send_signal(signal.SIGKILL)
                killed += 1
            if process.wait() == 0 and kind == "enter":
                confirmed += 1
            _look(attempt)
        entered = int(run("query", "SELECT count(*) FROM limits").split()[-1])
        if entered < confirmed:
            raise SystemExit(f"{confirmed} values were confirmed, and {entered} are there")
        print(
            f"{count} commands, {killed} killed: every store opened, {entered} values of "
            f"{confirmed} confirmed ones are there, and each grid is whole"
        )


def _look(attempt: int) -> None:
    checked = subprocess.run(
        [*COMMAND, "store", "check"], capture_output=True, text=True, check=False
    )
    if checked.returncode != 0:
        raise SystemExit(f"after command {attempt}: {checked.stdout}{checked.stderr}")
    with duckdb.connect("warehouse.duckdb", read_only=True) as warehouse:
        rows = warehouse.execute("SELECT count(*) FROM dwell").fetchall()[0][0]
    if rows != 50:
        raise SystemExit(f"after command {attempt}: the pushed table has {rows} rows")


def together(seconds: float) -> None:
    """Eight processes at once; every one must succeed each time, and no value may be lost."""
    with tempfile.TemporaryDirectory() as scratch:
        prepared(Path(scratch))
        until = time.time() + seconds
        code = (
            "import subprocess, sys, time\n"
            "me, until = int(sys.argv[1]), float(sys.argv[2]); n = 0\n"
            "def run(*a):\n"
            "    done = subprocess.run([sys.executable, '-m', 'midspread.cli.main', *a],"
            " capture_output=True, text=True)\n"
            "    if done.returncode: sys.exit(done.stderr)\n"
            "while time.time() < until:\n"
            "    if me < 4: run('enter', 'limits', f'k={me * 100000 + n}', f'v={n}')\n"
            "    elif me == 4: run('refresh')\n"
            "    else: run('query', '--recompute', 'SELECT count(*) FROM limits, dwell')\n"
            "    n += 1\n"
            "print(n)\n"
        )
        started = [
            subprocess.Popen(
                [sys.executable, "-c", code, str(me), str(until)],
                stdout=subprocess.PIPE,
                stderr=subprocess.PIPE,
                text=True,
            )
            for me in range(8)
        ]
        done = [process.communicate() for process in started]
        for process, (_, words) in zip(started, done, strict=True):
            if process.returncode != 0:
                raise SystemExit(f"an error reached a user: {words}")
        counts = [int(printed) for printed, _ in done]
        entered = int(run("query", "SELECT count(*) FROM limits").split()[-1])
        if entered != sum(counts[:4]):
            raise SystemExit(f"{sum(counts[:4])} values were entered, and {entered} are there")
        print(
            f"{seconds:.0f} s, 8 processes: {entered} values entered, {counts[4]} refreshes, "
            f"{sum(counts[5:])} queries, no error, none lost"
        )


def scale() -> None:
    """500 grids in a chain and in a fan, 2,000 files, 5 million rows."""
    from midspread.engine.grids.keeping import keep
    from midspread.engine.session import Session

    with tempfile.TemporaryDirectory() as scratch:
        os.chdir(scratch)
        store = Path(scratch) / "midspread.duckdb"
        with duckdb.connect() as made:
            for place in range(2000):
                made.execute(f"COPY (SELECT {place} AS v) TO 'f{place}.parquet'")
        began = time.perf_counter()
        with Session() as session:
            keep(session, store, "many", "SELECT count(*) AS n FROM 'f*.parquet'")
        print(f"keep over 2,000 files: {time.perf_counter() - began:.2f} s")
        began = time.perf_counter()
        for place in range(250):
            before = f"chain_{place - 1}" if place else "many"
            with Session() as session:
                keep(session, store, f"chain_{place}", f"SELECT n + 1 AS n FROM {before}")
        for place in range(249):
            with Session() as session:
                keep(session, store, f"fan_{place}", f"SELECT n + {place} AS n FROM many")
        print(f"499 more grids kept: {time.perf_counter() - began:.1f} s")
        began = time.perf_counter()
        run("show")
        print(f"midspread show with 500 grids: {time.perf_counter() - began:.2f} s")
        os.utime("f7.parquet")
        began = time.perf_counter()
        run("refresh")
        print(f"refresh after a touched file: {time.perf_counter() - began:.1f} s")
        query = "SELECT i AS k, i * {} AS v, 'text ' || i AS t FROM range(5000000) AS rows(i)"
        began = time.perf_counter()
        run("--help")
        run("keep", "large", query.format(1), "--key", "k", "--memory", "1GB")
        run("keep", "large", query.format(2), "--key", "k", "--memory", "1GB", "--replace")
        print(f"5 M rows kept twice under 1 GB: {time.perf_counter() - began:.1f} s")


def main() -> None:
    """Run what the command line asks for; all of it in small when it asks for nothing."""
    arguments = sys.argv[1:] or ["kills", "20", "together", "10", "scale"]
    while arguments:
        name = arguments.pop(0)
        if name == "kills":
            kills(int(arguments.pop(0)))
        elif name == "together":
            together(float(arguments.pop(0)))
        else:
            scale()


if __name__ == "__main__":
    main()
