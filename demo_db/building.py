"""Builds the demo database of Larkmoor Transit in a folder of its own, or finds it built."""

import os
import threading
from collections.abc import Callable, Iterable
from concurrent.futures import FIRST_COMPLETED, Future, ThreadPoolExecutor, wait
from dataclasses import dataclass
from pathlib import Path

import duckdb

from midspread.demo_db import folders, truth
from midspread.demo_db.folders import DemoError
from midspread.demo_db.generator import VISIT_COLUMNS, equip

FEWEST_VISITS, MOST_VISITS = 1_000, 100_000_000
# Old enough for every DuckDB 1.x client to open the file.
WAREHOUSE_FORMAT = "v1.0.0"
# More workers than this gain little.
MOST_WORKERS = 4

WAREHOUSE_TABLES = {
    "routes": "SELECT route, name, depot_name AS depot, length_km, stops "
    "FROM larkmoor_route ORDER BY depot, place",
    "stops": "SELECT stop, name, route, position, is_end_stop, has_shelter, kerb_cm "
    "FROM larkmoor_stop ORDER BY stop",
    "vehicles": "SELECT vehicle, depot_name AS depot, model, seats, capacity, in_service_since, "
    "reader_fitted FROM larkmoor_vehicle ORDER BY vehicle",
}


@dataclass(frozen=True)
class Demo:
    """Where a built demo database is.

    Parameters
    ----------
    folder
        The folder that holds everything.
    visits
        How many stop visits the year has.
    reused
        True where the folder already held this demo and nothing was written.
    """

    folder: Path
    visits: int
    reused: bool = False

    @property
    def dwell(self) -> str:
        """The glob of the Parquet files of visits, ready for DuckDB."""
        return folders.glob_of(self.folder / "dwell")

    @property
    def warehouse(self) -> Path:
        """The DuckDB file with the tables routes, stops and vehicles."""
        return self.folder / "warehouse.duckdb"


def build(
    folder: Path,
    *,
    visits: int = 2_000_000,
    on_progress: Callable[[float], None] | None = None,
    threads: int | None = None,
) -> Demo:
    """Build Larkmoor Transit's demo database, or find it built.

    Parameters
    ----------
    folder
        A folder that does not exist yet, is empty, or was built by this function with the same
        number of visits; then it is used as it is.
    visits
        Stop visits in the year, 1,000 to 100,000,000.
    on_progress
        Called in the calling thread with the share done so far, from 0 to 1. Whatever it raises
        stops the build, which leaves nothing behind, and goes on to the caller.
    threads
        Months written at the same time; by default the number of processors, at most 4. The
        files are the same whatever it is.

    Returns
    -------
    Demo
        Where the Parquet files and the warehouse are.

    Raises
    ------
    DemoError
        In one sentence, where the folder is not ours to fill or the disk refuses.
    """
    _check_visits(visits)
    if threads is not None and threads < 1:
        raise DemoError(f"The demo database is built with 1 or more threads; {threads} is not.")
    report = on_progress or (lambda _done: None)
    folder = Path(folder).absolute()
    if folders.holds_demo(folder, visits):
        report(1.0)
        return Demo(folder, visits, reused=True)
    workers = threads or min(os.cpu_count() or 1, MOST_WORKERS)
    try:
        with folders.staging(folder) as staged:
            report(0.0)
            _write_all(staged, visits, min(workers, 12), report)
            try:
                folders.publish(staged, folder, visits)
            except (OSError, DemoError):
                # another build may have finished first: its demo is as good as ours
                if not _is_built(folder, visits):
                    raise
    except (OSError, duckdb.Error) as error:
        reason = str(error).splitlines()[0].rstrip(". ")
        raise DemoError(
            f"The demo database could not be built in {folder}: {reason}; nothing was left "
            "there, choose a folder that can be written with room enough."
        ) from error
    report(1.0)
    return Demo(folder, visits)


def _check_visits(visits: int) -> None:
    is_whole = isinstance(visits, int) and not isinstance(visits, bool)
    if not is_whole or not FEWEST_VISITS <= visits <= MOST_VISITS:
        raise DemoError(
            f"The demo database takes a whole number of visits from {FEWEST_VISITS:,} to "
            f"{MOST_VISITS:,}, not {visits!r}; leave it out for 2,000,000."
        )


def _is_built(folder: Path, visits: int) -> bool:
    try:
        return folders.holds_demo(folder, visits)
    except DemoError:
        return False


def _write_all(staged: Path, visits: int, workers: int, report: Callable[[float], None]) -> None:
    """Write the warehouse and the twelve months, several side by side.

    The calling thread runs no query, so Ctrl-C and whatever `report` raises reach it at once.
    """
    (staged / "dwell").mkdir()
    writer = _Writer(staged, visits)
    pool = ThreadPoolExecutor(workers, thread_name_prefix="larkmoor")
    pending: set[Future[None]] = set()
    try:
        pending.add(pool.submit(writer.write_warehouse))
        pending |= {pool.submit(writer.write_month, month) for month in range(1, 13)}
        everything = len(pending)
        while pending:
            # a short wait at a time: on Windows a longer one would hold Ctrl-C up
            done, pending = wait(pending, timeout=0.2, return_when=FIRST_COMPLETED)
            _raise_first(done)
            if done:
                # 1.0 is for the caller to report, once the folder is in place
                report(min((everything - len(pending)) / everything, 0.99))
    except BaseException:
        pool.shutdown(wait=False, cancel_futures=True)
        while pending := {future for future in pending if not future.done()}:
            # again and again: an interrupt that comes before its query starts is lost
            writer.stop()
            wait(pending, timeout=0.05)
        raise
    finally:
        pool.shutdown()
        writer.close()


def _raise_first(futures: Iterable[Future[None]]) -> None:
    for future in futures:
        future.result()


class _Writer:
    """Writes the parts, each worker on an engine of its own so that none waits for another."""

    def __init__(self, staged: Path, visits: int) -> None:
        self._staged = staged
        self._visits = visits
        self._local = threading.local()
        self._connections: list[duckdb.DuckDBPyConnection] = []
        self._stopped = False

    def write_warehouse(self) -> None:
        path = _quoted(self._staged / "warehouse.duckdb")
        self._run(
            f"ATTACH {path} AS warehouse (STORAGE_VERSION '{WAREHOUSE_FORMAT}')",
            *(
                f"CREATE TABLE warehouse.{table} AS {query}"
                for table, query in WAREHOUSE_TABLES.items()
            ),
            "DETACH warehouse",
        )

    def write_month(self, month: int) -> None:
        # No ORDER BY, whose sort would hold the month in memory: one thread streams the visits in
        # the order of their numbers.
        first = f"DATE '{truth.YEAR}-{month:02d}-01'"
        path = _quoted(self._staged / "dwell" / f"{truth.YEAR}-{month:02d}.parquet")
        self._run(
            f"COPY (SELECT {', '.join(VISIT_COLUMNS)} "
            f"FROM larkmoor_visits({first}, last_day({first}))) "
            f"TO {path} (FORMAT parquet, COMPRESSION zstd)"
        )

    def _run(self, *statements: str) -> None:
        connection = self._connection()
        for statement in statements:
            if self._stopped:
                return
            connection.execute(statement)

    def _connection(self) -> duckdb.DuckDBPyConnection:
        connection: duckdb.DuckDBPyConnection | None = getattr(self._local, "connection", None)
        if connection is None:
            # one thread each: parts run side by side, and a file never depends on scheduling
            connection = duckdb.connect(
                ":memory:",
                config={
                    "threads": 1,
                    # else the visits, whose number the planner cannot guess, end up in hash tables
                    "disabled_optimizers": "join_order,build_side_probe_side",
                },
            )
            self._connections.append(connection)
            equip(connection, self._visits)
            self._local.connection = connection
        return connection

    def stop(self) -> None:
        self._stopped = True
        for connection in self._connections:
            connection.interrupt()

    def close(self) -> None:
        for connection in self._connections:
            connection.close()


def _quoted(path: Path) -> str:
    return "'" + str(path).replace("'", "''") + "'"
