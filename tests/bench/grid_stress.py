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

LIMIT = "500MB"
COMMAND = (sys.executable, "-m", "midspread.cli.main")


def run(*arguments: str, check: bool = True) -> str:
    """One command; its output."""
    done = subprocess.run([*COMMAND, *arguments], capture_output=True, text=True, check=False)
    if check and done.returncode != 0:
        raise SystemExit(f"{' '.join(arguments)} failed: {done.stderr}")
    return done.stdout


def numbers(sql: str) -> set[int]:
    """The whole numbers that a query gives."""
    return set(map(int, run("query", "--recompute", sql).split()[1:]))


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
    run("keep", "total", "SELECT count(*) AS n, sum(v)::BIGINT AS v FROM limits")
    run("attach", "wh=warehouse.duckdb")
    run("keep", "copied", "SELECT route, n FROM dwell", "--key", "route")
    run("push", "copied", "wh.main.dwell")


def kills(count: int) -> None:
    """Kill commands at random moments and look at the store after each."""
    chance = random.Random(20310101)
    with tempfile.TemporaryDirectory() as scratch:
        prepared(Path(scratch))
        confirmed: set[int] = set()
        months = 1
        killed = 0
        lasts: dict[str, float] = {}  # so that the kills fall into the work, however slow it is
        for kind, arguments in _commands(count).items():
            began = time.perf_counter()
            run(*arguments)
            lasts[kind] = time.perf_counter() - began
        for attempt in range(count):
            kind = chance.choice(("enter", "refresh", "keep", "column", "push"))
            if kind == "refresh":
                months += 1
                duckdb.sql(
                    f"COPY (SELECT i % 50 AS route, i / 8.0 AS dwell_s FROM range({1000 * months})"
                    f" AS rows(i)) TO 'month_{months}.parquet' (FORMAT parquet)"
                )
            process = subprocess.Popen(
                [*COMMAND, *_commands(attempt)[kind]],
                stdout=subprocess.DEVNULL,
                stderr=subprocess.DEVNULL,
            )
            time.sleep(chance.uniform(0.3, 1.2) * lasts[kind])
            if process.poll() is None:
                process.send_signal(signal.SIGKILL)
                killed += 1
            if process.wait() == 0 and kind == "enter":
                confirmed.add(attempt)
            _look(attempt)
        entered = numbers("SELECT k FROM limits WHERE v = k")
        if not confirmed <= entered:
            raise SystemExit(f"confirmed, and not there: {sorted(confirmed - entered)}")
        print(
            f"{count} commands, {killed} killed: every store opened, all {len(confirmed)} confirmed"
            f" values are there ({len(entered)} values in all), and each grid is whole"
        )


def _commands(number: int) -> dict[str, tuple[str, ...]]:
    """The commands that are killed, each telling by a number when it was run."""
    return {
        "enter": ("enter", "limits", f"k={number}", f"v={number}"),
        "refresh": ("refresh",),
        "keep": (
            *("keep", "dwell", "--replace"),
            f"SELECT route, count(*) + {number} AS n FROM '*.parquet' GROUP BY route",
        ),
        "column": ("column", "dwell", f"c{number} AS (n + {number})"),
        "push": ("push", "copied", "wh.main.dwell", "--mode", "replace", "--stale-ok"),
    }


def _look(attempt: int) -> None:
    checked = subprocess.run(
        [*COMMAND, "store", "check"], capture_output=True, text=True, check=False
    )
    if checked.returncode != 0:
        raise SystemExit(f"after command {attempt}: {checked.stdout}{checked.stderr}")
    # Every route has as many visits as the others: rows of two results would not agree.
    for database in ("warehouse.duckdb", "midspread.duckdb"):
        with duckdb.connect(database, read_only=True) as opened:
            found = opened.execute("SELECT count(*), count(DISTINCT n) FROM dwell").fetchall()
        if found != [(50, 1)]:
            raise SystemExit(f"after command {attempt}: dwell in {database} is {found}")


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
            "    else: run('query', '--recompute', 'SELECT count(*) FROM limits, dwell, total')\n"
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
        expected = {me * 100000 + n for me in range(4) for n in range(counts[me])}
        if numbers("SELECT k FROM limits WHERE v = k % 100000") != expected:
            raise SystemExit("the values that are there are not those that were entered")
        entered = len(expected)
        run("refresh")
        if numbers("SELECT n FROM total") != {entered}:
            raise SystemExit("refresh did not count every value")
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
        large()


def large() -> None:
    """A grid of 5 million rows: kept, refreshed and compared, with the most memory each took."""
    duckdb.execute("SET enable_progress_bar = false")
    rows = "SELECT i AS k, i * {} AS v, 'text ' || i AS t FROM range(5000000) AS rows(i)"
    duckdb.sql(f"COPY ({rows.format(1)}) TO 'large.parquet'")
    _measured("keep", "large", "FROM 'large.parquet'", "--key", "k", "--memory", LIMIT)
    duckdb.sql(f"COPY ({rows.format('(1 + (i % 100 = 0)::INT)')}) TO 'large.parquet'")
    _measured("refresh", "large", "--memory", LIMIT)
    _measured("changes", "large", "--memory", LIMIT)


def _measured(*arguments: str) -> None:
    """Run a command and print how long it took and the most memory it had."""
    began = time.perf_counter()
    with tempfile.TemporaryFile() as words:
        process = subprocess.Popen([*COMMAND, *arguments], stdout=words, stderr=words)
        _, status, used = os.wait4(process.pid, 0)
        if status:
            words.seek(0)
            raise SystemExit(f"{arguments[0]} failed: {words.read().decode()}")
    print(
        f"{arguments[0]} with 5 M rows and --memory {LIMIT}: {time.perf_counter() - began:.1f} s, "
        f"{used.ru_maxrss / 1e6:.2f} GB at most"
    )


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
