"""Fingerprints: whatever changes an answer changes them, or there is none."""

import dataclasses
import os
import time
from collections.abc import Callable, Iterable
from pathlib import Path

import pytest

from midspread.engine.inputs import files
from midspread.engine.inputs.fingerprints import (
    FileState,
    InputWatch,
    reason_not_to_keep,
)

from .asking import Engine, inputs, run
from .conftest import replace_keeping_times, write_month

KEPT = [
    "SELECT route, median(dwell_s) FROM 'dwell/*.parquet' GROUP BY route",
    "SELECT * FROM read_parquet(['dwell/2031-01.parquet', 'dwell/2031-02.parquet'])",
    "SELECT count(*) FROM read_parquet('dwell')",
    'SELECT * FROM "stops.csv"',
    "SELECT * FROM stops.csv JOIN 'dwell/2031-01.parquet' ON stop = route",
    "FROM query_table('stops.csv')",
    "FROM query('SELECT * FROM ''stops.csv'' LIMIT 1')",
    "PIVOT 'dwell/*.parquet' ON route USING sum(dwell_s)",
    "SUMMARIZE 'stops.csv'",
    "FROM sniff_csv('stops.csv')",
    "FROM glob('dwell/*')",
    "SELECT * FROM parquet_metadata('dwell/*.parquet')",
    "SELECT count(*) FROM 'dwell/*.parquet' JOIN (FROM 'stops.csv') ON visit = stop",
    "SELECT 42, 'no.csv'",
]


@pytest.mark.parametrize("sql", KEPT)
@pytest.mark.usefixtures("folder")
def test_an_answer_from_files_may_be_kept(engine: Engine, sql: str) -> None:
    assert run(engine, sql) is None
    one = inputs(engine, sql).fingerprint()
    assert one is not None
    assert one == inputs(engine, sql).fingerprint()


@pytest.mark.parametrize(
    "sql",
    [
        "SELECT count(*) FROM 'dwell/*.parquet'",
        "FROM read_parquet('dwell')",
        "FROM robust_summary('dwell/*.parquet', 'dwell_s')",
        "FROM robust_summary('(SELECT * FROM ''dwell/*.parquet'')', 'dwell_s')",
        "FROM glob('dwell/**')",
    ],
)
def test_any_change_to_the_files_behind_a_pattern_shows(
    engine: Engine, folder: Path, settle: Callable[[], None], sql: str
) -> None:
    seen = {inputs(engine, sql).fingerprint()}
    month = folder / "dwell" / "2031-02.parquet"
    content = month.read_bytes()

    replace_keeping_times(month, content[:-20] + bytes(12) + content[-8:])
    settle()
    seen.add(inputs(engine, sql).fingerprint())

    write_month(month, 60)
    settle()
    seen.add(inputs(engine, sql).fingerprint())

    write_month(folder / "dwell" / "2031-03.parquet")
    settle()
    seen.add(inputs(engine, sql).fingerprint())

    month.unlink()
    seen.add(inputs(engine, sql).fingerprint())

    (folder / "dwell" / "2031-03.parquet").rename(folder / "dwell" / "2031-04.parquet")
    settle()
    seen.add(inputs(engine, sql).fingerprint())
    assert len(seen) == 6
    assert None not in seen


def test_changes_within_a_tick_of_the_clock_show(
    engine: Engine, folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """By the real clock: same size, same name, old times put back, at once."""
    monkeypatch.setattr("midspread.engine.inputs.fingerprints.now_ns", time.time_ns)
    path = folder / "stops.csv"
    seen = set()
    for number in range(8):
        replace_keeping_times(path, path.read_bytes()[:-2] + f"{number}\n".encode())
        seen.add(inputs(engine, "FROM 'stops.csv'").fingerprint())
    assert len(seen) == 8
    assert None not in seen


def at_whole_seconds(path: str) -> FileState | None:
    """Give the state of a file changed now, by a file system with a clock of whole seconds."""
    found = FileState.of(path)
    return found and dataclasses.replace(found, ctime_ns=time.time_ns() // 10**9 * 10**9)


@pytest.mark.usefixtures("folder")
def test_a_clock_of_whole_seconds_is_not_trusted_for_two(
    engine: Engine, monkeypatch: pytest.MonkeyPatch
) -> None:
    real = files.states

    def coarse(paths: Iterable[str]) -> tuple[FileState, ...]:
        found = [at_whole_seconds(state.path) for state in real(paths)]
        return tuple(state for state in found if state is not None)

    sql = "FROM 'stops.csv'"
    monkeypatch.setattr(files, "states", coarse)
    assert inputs(engine, sql).fingerprint() is not None
    monkeypatch.setattr("midspread.engine.inputs.fingerprints.now_ns", time.time_ns)
    state = inputs(engine, sql).look()
    assert state.fingerprint is None
    assert "stops.csv changed a moment ago" in str(state.obstacle)
    assert inputs(engine, "SELECT 1").fingerprint() is not None


def test_setting_a_time_back_does_not_make_a_file_trusted(tmp_path: Path) -> None:
    path = tmp_path / "stops.csv"
    path.write_text("stop,name\n3,Quay\n")
    os.utime(path, (1_000_000_000, 1_000_000_000))
    state = FileState.of(str(path))
    assert state is not None
    assert state.settles_ns() > time.time_ns() - 10**9


def test_a_path_that_comes_to_exist_shows(
    engine: Engine, folder: Path, settle: Callable[[], None]
) -> None:
    sql = "FROM read_csv('later.csv')"
    before = inputs(engine, sql).fingerprint()
    (folder / "later.csv").write_text("a\n1\n")
    settle()
    assert inputs(engine, sql).fingerprint() != before


def test_the_same_words_in_another_folder_are_another_input(
    engine: Engine, folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    sql = "FROM 'stops.csv'"
    before = inputs(engine, sql).fingerprint()
    other = folder / "other"
    other.mkdir()
    (folder / "stops.csv").rename(other / "stops.csv")
    monkeypatch.chdir(other)
    assert inputs(engine, sql).fingerprint() not in (None, before)


@pytest.mark.parametrize(
    ("sql", "word"),
    [
        ("FROM read_csv('stops' || '.csv')", "computed"),
        ("FROM read_text(['stops.csv' || ''])", "computed"),
        ("FROM 'https://example.org/stops.csv'", "machine"),
        ("FROM read_parquet('s3://larkmoor/*.parquet')", "machine"),
        ("FROM read_csv('/dev/null')", "regular"),
    ],
)
@pytest.mark.usefixtures("folder")
def test_inputs_that_cannot_be_known(engine: Engine, sql: str, word: str) -> None:
    state = inputs(engine, sql).look()
    assert state.fingerprint is None
    assert word in str(state.obstacle)


@pytest.mark.usefixtures("folder")
def test_a_search_path_for_files_is_not_followed(engine: Engine) -> None:
    engine.execute("SET file_search_path = 'dwell'")
    assert inputs(engine, "FROM '2031-01.parquet'").fingerprint() is None


def test_local_urls_are_local(engine: Engine, folder: Path) -> None:
    assert run(engine, f"FROM 'file://{folder}/stops.csv'") is None
    assert run(engine, f"FROM '{folder}/stops.csv'") is None


def test_a_file_read_by_ways_unseen_keeps_the_answer_out(engine: Engine, folder: Path) -> None:
    """An attached database whose view reads a file is found; a stranger opening one is noticed."""
    found = inputs(engine, "SELECT 1")
    before = found.look()
    with InputWatch(engine) as watch:
        engine.execute("FROM 'stops.csv'").fetchall()
    assert watch.opened == {str(folder / "stops.csv")}
    reason = reason_not_to_keep(["SELECT 1"], engine, before, watch, found.look())
    assert reason is not None
    assert "stops.csv was read" in reason


def test_a_change_while_the_query_ran_keeps_the_answer_out(
    engine: Engine, folder: Path, settle: Callable[[], None]
) -> None:
    found = inputs(engine, "FROM 'stops.csv'")
    before = found.look()
    with InputWatch(engine) as watch:
        engine.execute("FROM 'stops.csv'").fetchall()
        (folder / "stops.csv").write_text("stop,name\n1,Mill Lane\n2,Harbour\n3,Quay\n")
    settle()
    reason = reason_not_to_keep(["FROM 'stops.csv'"], engine, before, watch, found.look())
    assert reason is not None
    assert "changed while" in reason


def test_the_folder_does_not_matter_to_an_absolute_path(
    engine: Engine, folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    sql = f"FROM '{folder}/dwell/*.parquet'"
    before = inputs(engine, sql).fingerprint()
    monkeypatch.chdir(folder / "dwell")
    assert inputs(engine, sql).fingerprint() == before is not None


@pytest.mark.usefixtures("folder")
def test_a_database_attached_for_writing_is_not_relied_on(engine: Engine) -> None:
    engine.execute("ATTACH 'mine.duckdb' AS mine")
    assert inputs(engine, "SELECT * FROM mine.t").fingerprint() is None
    assert inputs(engine, "SELECT 1").fingerprint() is not None


def test_two_thousand_files_take_less_than_a_second(engine: Engine, folder: Path) -> None:
    many = folder / "many"
    many.mkdir()
    for number in range(2000):
        (many / f"{number:04}.csv").write_text("a\n1\n")
    found = inputs(engine, "FROM 'many/*.csv'")
    found.look()
    start = time.perf_counter()
    state = found.look()
    took = time.perf_counter() - start
    assert len(state.files) == 2000
    assert took < 1  # the promise; 2 cores here take about 0.03 s


@pytest.mark.usefixtures("folder")
def test_the_watch_leaves_logging_as_it_found_it(engine: Engine) -> None:
    names = ("enable_logging", "logging_level", "logging_mode", "enabled_log_types")
    asked = "SELECT " + ", ".join(f"current_setting('{name}')" for name in names)
    engine.execute("SET logging_level = 'DEBUG'")
    before = engine.execute(asked).fetchall()
    with pytest.raises(ZeroDivisionError), InputWatch(engine) as watch:
        raise ZeroDivisionError
    assert watch.opened == frozenset()
    with InputWatch(engine):
        engine.execute("FROM 'stops.csv'").fetchall()
    assert engine.execute(asked).fetchall() == before
    assert engine.execute("SELECT count(*) FROM duckdb_logs").fetchall() == [(0,)]

    engine.execute("CALL enable_logging('QueryLog')")
    before = engine.execute(asked).fetchall()
    with InputWatch(engine) as watch:
        engine.execute("FROM 'stops.csv'").fetchall()
    assert watch.opened is None
    assert engine.execute(asked).fetchall() == before
    assert engine.execute("SELECT count(*) FROM duckdb_logs").fetchall() != [(0,)]


def test_the_watch_sees_odd_names_and_not_the_scratch_files(engine: Engine, folder: Path) -> None:
    odd = folder / 'a "quoted", op é\'s.csv'
    odd.write_text("a\n1\n")
    engine.execute("SET memory_limit = '100MB'")
    engine.execute("SET temp_directory = 'scratch'")
    with InputWatch(engine) as watch:
        engine.execute("FROM read_csv($1)", [str(odd)]).fetchall()
        engine.execute(
            "SELECT max(m) FROM (SELECT md5(range::VARCHAR) AS m, row_number() OVER (ORDER BY m)"
            " FROM range(2000000))"
        ).fetchall()
    assert watch.opened == {str(odd)}
