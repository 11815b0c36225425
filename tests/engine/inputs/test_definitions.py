"""Fingerprints of what stands behind a query: views, macros, tables, attached databases."""

from collections.abc import Callable
from pathlib import Path

import duckdb
import pytest

from midspread.engine.inputs.fingerprints import (
    FileState,
    inputs_of,
)

from .asking import OURS, Engine, inputs, run
from .conftest import write_month


@pytest.mark.usefixtures("folder")
def test_views_and_macros_of_the_script(engine: Engine) -> None:
    view = "CREATE OR REPLACE TEMP VIEW v AS FROM 'dwell/*.parquet'"
    assert run(engine, view, "SELECT count(*) FROM v") is None
    macro = "CREATE OR REPLACE TEMP MACRO month(p) AS TABLE SELECT count(*) FROM read_parquet(p)"
    script = (macro, "FROM month('dwell/*.parquet')")
    assert run(engine, *script) is None
    assert "dwell/*.parquet" in inputs(engine, *script).patterns
    table = "CREATE OR REPLACE TEMP TABLE t AS FROM 'stops.csv'"
    assert run(engine, table, "FROM t") is None
    # A second time the view, the macro and the table exist already: still the same inputs.
    first = inputs(engine, view, "SELECT count(*) FROM v").fingerprint()
    engine.execute("DROP VIEW v")
    assert inputs(engine, view, "SELECT count(*) FROM v").fingerprint() == first


def test_views_of_the_session_are_followed_to_their_files(
    engine: Engine, folder: Path, settle: Callable[[], None]
) -> None:
    engine.execute("CREATE TEMP VIEW inner_v AS FROM 'dwell/*.parquet'")
    engine.execute('CREATE TEMP VIEW "Outer v" AS SELECT route FROM inner_v')
    sql = 'SELECT count(*) FROM "outer V"'
    assert run(engine, sql) is None
    before = inputs(engine, sql).fingerprint()
    write_month(folder / "dwell" / "2031-03.parquet")
    settle()
    after = inputs(engine, sql).fingerprint()
    assert after != before
    engine.execute("CREATE OR REPLACE TEMP VIEW inner_v AS SELECT * FROM 'dwell/2031-01.parquet'")
    assert inputs(engine, sql).fingerprint() not in (before, after)
    assert inputs(engine, "FROM robust_summary('Outer v', 'route')").patterns != ()


@pytest.mark.usefixtures("folder")
def test_tables_and_macros_of_the_session_are_no_inputs_to_rely_on(engine: Engine) -> None:
    engine.execute("CREATE TEMP TABLE t AS SELECT 1 AS a")
    engine.execute("CREATE TABLE u AS SELECT 1 AS a")
    engine.execute("CREATE TEMP MACRO plus(a, b := 2) AS a + b")
    assert inputs(engine, "FROM t").fingerprint() is None
    assert inputs(engine, "FROM U").fingerprint() is None
    assert inputs(engine, "SELECT plus(1)").fingerprint() is None
    assert inputs(engine, "CREATE TEMP TABLE IF NOT EXISTS t AS SELECT 2", "FROM t").look().obstacle


@pytest.fixture
def warehouse(engine: Engine, folder: Path, settle: Callable[[], None]) -> Path:
    path = folder / "warehouse.duckdb"
    with duckdb.connect(path) as other:
        other.execute("CREATE TABLE routes AS SELECT range AS route FROM range(3)")
        other.execute("CREATE VIEW named AS SELECT * FROM 'stops.csv'")
        other.execute("CREATE MACRO visits(p) AS TABLE SELECT count(*) FROM read_parquet(p)")
    settle()
    engine.execute(f"ATTACH '{path}' AS wh (READ_ONLY)")
    return path


def test_attached_databases(
    engine: Engine, folder: Path, warehouse: Path, settle: Callable[[], None]
) -> None:
    routes, named = "SELECT * FROM wh.routes", "FROM robust_summary('wh.named', 'stop')"
    assert run(engine, routes) is None
    assert run(engine, "FROM wh.named") is None
    assert run(engine, "FROM wh.visits('dwell/*.parquet')") is None
    assert inputs(engine, "FROM 'stops.csv'").databases == {}
    before = [inputs(engine, sql).fingerprint() for sql in (routes, named, "SELECT 1")]

    (folder / "stops.csv").write_text("stop,name\n9,Quay\n")
    settle()
    between = [inputs(engine, sql).fingerprint() for sql in (routes, named, "SELECT 1")]
    assert [a == b for a, b in zip(before, between, strict=True)] == [True, False, True]

    engine.execute("DETACH wh")
    with duckdb.connect(warehouse) as other:
        other.execute("INSERT INTO routes VALUES (77)")
    settle()
    engine.execute(f"ATTACH '{warehouse}' AS wh (READ_ONLY)")
    after = [inputs(engine, sql).fingerprint() for sql in (routes, named, "SELECT 1")]
    assert [a == b for a, b in zip(between, after, strict=True)] == [False, False, True]

    engine.execute("USE wh")
    assert list(inputs(engine, "FROM routes").databases) == ["wh"]


@pytest.mark.usefixtures("folder")
def test_the_log_beside_a_database_counts(
    engine: Engine, warehouse: Path, settle: Callable[[], None]
) -> None:
    before = inputs(engine, "FROM wh.routes").fingerprint()
    warehouse.with_name("warehouse.duckdb.wal").write_bytes(b"x")
    settle()
    assert inputs(engine, "FROM wh.routes").fingerprint() not in (None, before)
    assert "warehouse.duckdb.wal" in inputs(engine, "FROM 'warehouse.duckdb'").look().to_json()


def test_an_attached_file_that_is_replaced_by_another_is_not_relied_on(
    engine: Engine, folder: Path, warehouse: Path, settle: Callable[[], None]
) -> None:
    """The engine reads the old one on, whatever has taken its name."""
    seen: dict[str, tuple[FileState, ...]] = {}
    sql = "SELECT count(*) FROM wh.routes"
    found = inputs_of([sql], engine, table_functions=OURS, seen=seen)
    assert found.fingerprint() is not None
    with duckdb.connect(folder / "other.duckdb") as other:
        other.execute("CREATE TABLE routes AS SELECT range AS route FROM range(99)")
    (folder / "other.duckdb").rename(warehouse)
    settle()
    assert engine.execute(sql).fetchall() == [(3,)]
    again = inputs_of([sql], engine, table_functions=OURS, seen=seen).look()
    assert again.fingerprint is None
    assert "has been replaced" in str(again.obstacle)
