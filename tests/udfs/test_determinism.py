"""Same data, same bits: whatever the threads, the order of rows and files, or the layout."""

import threading
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import duckdb
import numpy as np
import pytest

from midspread.udfs import Control, Function, grouped, register
from tests.udfs.calling import AGGREGATES, NAMES, answers, bits, call

each_function = pytest.mark.parametrize("function", AGGREGATES, ids=NAMES)
ALL = ", ".join(call(function) for function in AGGREGATES)
PORTION = 131_072
"""So many values are worked on at once by one thread."""

READINGS = """
    SELECT i AS visit,
        CASE WHEN i % 3 = 0 THEN 'one' WHEN i % 50 < 25 THEN 'two' ELSE 'g' || (i // 40 % 300) END
            AS stop,
        CASE WHEN i % 17 = 0 THEN NULL ELSE exp((hash(i) % 60000) / 10000.0) END AS x,
        1 + (hash(i * 31) % 9) / 10.0 AS w, i % 31 + (hash(i * 31) % 7) AS v
    FROM range(60000) AS t(i)
"""


def equipped(threads: int) -> duckdb.DuckDBPyConnection:
    connection = duckdb.connect(config={"threads": threads})
    register(connection)
    return connection


def grouped_answers(connection: duckdb.DuckDBPyConnection, source: str) -> list[Any]:
    query = f"SELECT stop, {ALL} FROM {source} GROUP BY stop ORDER BY stop"
    return bits(connection.execute(query).fetchall())  # type: ignore[no-any-return]


@pytest.fixture(scope="module")
def parquet(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("readings") / "readings.parquet"
    with duckdb.connect() as connection:
        connection.execute(f"COPY ({READINGS}) TO '{path}'")
    return path


@pytest.fixture(scope="module")
def reference(parquet: Path) -> list[Any]:
    with equipped(threads=1) as connection:
        return grouped_answers(connection, f"'{parquet}'")


@pytest.mark.parametrize("threads", [2, 4])
def test_number_of_threads(parquet: Path, reference: list[Any], threads: int) -> None:
    with equipped(threads) as connection:
        for _ in range(2):
            assert grouped_answers(connection, f"'{parquet}'") == reference


@pytest.mark.parametrize(
    "order", ["visit DESC", "hash(visit)", "x, w DESC", "stop, hash(visit + 5)"]
)
def test_order_of_rows(parquet: Path, reference: list[Any], order: str) -> None:
    with equipped(threads=2) as connection:
        connection.execute(f"CREATE TABLE shuffled AS FROM '{parquet}' ORDER BY {order}")
        assert grouped_answers(connection, "shuffled") == reference


@pytest.mark.parametrize("files", [2, 7])
def test_split_into_files(parquet: Path, reference: list[Any], tmp_path: Path, files: int) -> None:
    with equipped(threads=4) as connection:
        for part in range(files):
            # Names that sort in another order than the rows, parts of unequal size
            path = tmp_path / f"part-{part * 5 % 7}.parquet"
            chosen = f"floor(sqrt(hash(visit * 7) % 10000) * {files} / 100) = {part}"
            connection.execute(
                f"COPY (FROM '{parquet}' WHERE {chosen}) TO '{path}' (ROW_GROUP_SIZE 2048)"
            )
        assert grouped_answers(connection, f"'{tmp_path}/*.parquet'") == reference


def test_inside_other_batches(parquet: Path, reference: list[Any]) -> None:
    """A group answers the same alone as among thousands of others."""
    alone = {}
    with equipped(threads=2) as connection:
        connection.execute(f"CREATE TABLE readings AS FROM '{parquet}'")
        for row in reference[::37]:
            source = f"(FROM readings WHERE stop = '{row[0]}')"
            alone[row[0]] = grouped_answers(connection, source)[0]
        connection.execute(
            "INSERT INTO readings SELECT 0, 'other ' || i % 5000, i, 1, i % 7 "
            "FROM range(20000) AS t(i)"
        )
        crowd = {row[0]: row for row in grouped_answers(connection, "readings")}
    for row in reference[::37]:
        assert alone[row[0]] == row == crowd[row[0]]


BOUNDARIES = (1, 2, 7, 8, 9, 15, 16, 17, 31, 32, 33, 63, 64, 65, 95, 96, 97)
BOUNDARIES += (127, 128, 129, 255, 256, 257, 511, 512, 513, 1000)


def readings(generator: np.random.Generator, n: int) -> list[float]:
    """Skewed values with ties, a few of them far out."""
    values = np.round(generator.lognormal(3.0, 1.0, n), 1)
    values[generator.uniform(size=n) < 0.03] = 3600.0
    return values.tolist()  # type: ignore[no-any-return]


@each_function
def test_padded_or_on_their_own(
    connection: duckdb.DuckDBPyConnection,
    function: Function,
    generator: np.random.Generator,
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    """Small groups are padded to common widths; the padding must not show at any size."""
    groups = [readings(generator, n) for n in BOUNDARIES]
    weights = [generator.uniform(0.0, 2.0, n).round(2).tolist() for n in BOUNDARIES]
    padded = answers(connection, function, groups, weights)

    def one_by_one(
        _lengths: grouped.Indices, start: int, stop: int
    ) -> Iterator[tuple[grouped.Indices, int]]:
        for group in range(start, stop):
            yield np.array([group], dtype=np.int64), 0

    monkeypatch.setattr(grouped, "_layouts", one_by_one)
    assert bits(answers(connection, function, groups, weights)) == bits(padded)
    monkeypatch.undo()
    alone = [
        answers(connection, function, [group], [own])[0]
        for group, own in zip(groups, weights, strict=True)
    ]
    assert bits(alone) == bits(padded)


def test_groups_as_large_as_a_portion_and_larger() -> None:
    """Portions end between groups; large groups among small ones, one thread or several."""
    sizes = [PORTION - 1, 3, PORTION, 1, PORTION + 1, 700, 2 * PORTION + 5, 60, 60]
    bounds = np.cumsum([0, *sizes])
    cases = " ".join(f"WHEN i < {bound} THEN {g}" for g, bound in enumerate(bounds[1:]))
    source = f"""
        SELECT i, CASE {cases} END AS stop,
            exp((hash(i) % 70000) / 10000.0) AS x, 1 + hash(i * 3) % 4 AS w, hash(i * 5) % 99 AS v
        FROM range({bounds[-1]}) AS t(i)
    """
    found = []
    for threads, order in ((1, "i"), (2, "hash(i)"), (4, "i DESC")):
        with equipped(threads) as connection:
            connection.execute(f"CREATE TABLE readings AS {source} ORDER BY {order}")
            found.append(grouped_answers(connection, "readings"))
            if threads == 2:
                alone = [
                    grouped_answers(connection, f"(FROM readings WHERE stop = {g})")[0]
                    for g in (1, 4, 5)
                ]
    assert found[0] == found[1] == found[2]
    assert alone == [found[0][g] for g in (1, 4, 5)]


@pytest.fixture
def controlled() -> Iterator[tuple[duckdb.DuckDBPyConnection, Control]]:
    """A connection with a control of its own and half a million readings at 20,000 stops.

    Of one thread: several may count at the same moment, and then a few values go uncounted.
    """
    control = Control()
    with duckdb.connect(config={"threads": 1}) as connection:
        register(connection, control=control)
        connection.execute(
            "CREATE TABLE readings AS SELECT i % 20000 AS stop, (hash(i) % 100000) / 7.0 AS x "
            "FROM range(500000) AS t(i)"
        )
        yield connection, control


def test_finished_values_are_counted(
    controlled: tuple[duckdb.DuckDBPyConnection, Control],
) -> None:
    connection, control = controlled
    assert control.done == 0
    connection.execute("SELECT stop, trimmed_mean(x) FROM readings GROUP BY stop").fetchall()
    assert control.done == 500_000
    connection.execute("SELECT trimmed_mean(CASE WHEN x > 99 THEN x END) FROM readings").fetchall()
    above = connection.execute("SELECT count(*) FROM readings WHERE x > 99").fetchall()[0][0]
    assert control.done == 500_000 + above


def test_a_stop_is_heeded_and_the_connection_lives_on(
    controlled: tuple[duckdb.DuckDBPyConnection, Control],
) -> None:
    connection, control = controlled
    query = "SELECT stop, hodges_lehmann(x) FROM readings GROUP BY stop ORDER BY stop"
    expected = connection.execute(query).fetchall()
    finished = control.done

    control.stop()
    with pytest.raises(duckdb.Error, match="Stopped"):
        connection.execute(query).fetchall()
    assert control.done == finished
    control.reset()
    assert connection.execute(query).fetchall() == expected

    def stop_once_under_way(before: int) -> None:
        while control.done == before and not over.wait(0.0005):
            pass
        control.stop()

    # Sixty groups of 100,000 values: many times longer than the watcher needs.
    long = (
        "SELECT stop % 5 AS s, r, hodges_lehmann(x) FROM readings, range(12) AS o(r) GROUP BY s, r"
    )
    over = threading.Event()
    before = control.done
    watcher = threading.Thread(target=stop_once_under_way, args=(before,))
    watcher.start()
    try:
        with pytest.raises(duckdb.Error, match="Stopped"):
            connection.execute(long).fetchall()
    finally:
        over.set()
        watcher.join()
    assert before < control.done < before + 12 * 500_000
    control.reset()
    assert connection.execute(query).fetchall() == expected
