"""Pushes that cannot succeed: one sentence each, and the target as it was."""

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import duckdb
import pytest

from midspread.engine.errors import MidspreadError
from midspread.engine.grids.sources import attach
from midspread.engine.pushing.intents import unconfirmed_in
from midspread.engine.store.store import Store
from tests.engine.pushing.conftest import InDuckdb, InPostgres, InSqlite, Keep, Push, Warehouse


@pytest.fixture(autouse=True)
def limits(kept: Keep) -> None:
    """A grid of five limits."""
    kept(
        "limits",
        "SELECT 'R' || i AS route, i * 1.5::DOUBLE AS limit_s FROM range(5) AS t(i)",
        key=["route"],
    )


def refused(pushed: Push, *arguments: str) -> str:
    with pytest.raises(MidspreadError) as caught:
        pushed("limits", *arguments)
    sentence = str(caught.value)
    assert sentence.startswith("push: ")
    assert "\n" not in sentence
    return sentence


def test_a_row_the_table_refuses_takes_all_back(
    warehouse: Warehouse, pushed: Push, store: Path
) -> None:
    warehouse.run(
        "CREATE TABLE limits (route VARCHAR(9), limit_s DOUBLE PRECISION CHECK (limit_s < 5))"
    )
    warehouse.run("INSERT INTO limits VALUES ('R0', 4.5), ('old', 1.0)")
    for mode in ("append", "merge", "replace"):
        assert "wh refused the rows" in refused(pushed, "wh.limits", mode)
        assert warehouse.rows("SELECT route, limit_s FROM limits") == [("R0", 4.5), ("old", 1.0)]
    assert unconfirmed_in(Store(store)) == []


def test_a_view_is_no_table(warehouse: Warehouse, pushed: Push) -> None:
    warehouse.run("CREATE VIEW limits AS SELECT 'a' AS route, 1.5 AS limit_s")
    assert "wh.limits is a view" in refused(pushed, "wh.limits", "replace")


def test_a_schema_that_is_not_there(warehouse: Warehouse, pushed: Push) -> None:
    assert "wh has no schema depot" in refused(pushed, "wh.depot.limits")
    assert warehouse.run("SELECT 1") == [(1,)]


@pytest.mark.parametrize("kind", [InDuckdb, InSqlite])
def test_a_read_only_file_stays_as_it_is(
    kind: type[InDuckdb] | type[InSqlite], pushed: Push, folder: Path, store: Path
) -> None:
    made = kind(folder / f"warehouse.{kind.kind}")
    attach(store, "wh", str(made.path))
    before = made.path.read_bytes()
    made.path.chmod(0o444)
    assert "is read-only" in refused(pushed, "wh.limits")
    assert pushed("limits", "wh.limits", is_dry=True).outcome.added == 5
    assert made.path.read_bytes() == before


@pytest.mark.parametrize("kind", [InDuckdb, InSqlite])
def test_a_file_that_vanished(
    kind: type[InDuckdb] | type[InSqlite], pushed: Push, folder: Path, store: Path
) -> None:
    made = kind(folder / f"warehouse.{kind.kind}")
    attach(store, "wh", str(made.path))
    made.path.unlink()
    assert "midspread attach wh=PATH" in refused(pushed, "wh.limits")
    assert not made.path.exists()


HOLDERS = {
    InDuckdb: "import duckdb; held = duckdb.connect({!r})",
    InSqlite: "import sqlite3; held = sqlite3.connect({!r}); held.execute('BEGIN EXCLUSIVE')",
}


@pytest.mark.parametrize("kind", [InDuckdb, InSqlite])
def test_a_file_that_another_program_holds(
    kind: type[InDuckdb] | type[InSqlite], pushed: Push, folder: Path, store: Path
) -> None:
    made = kind(folder / f"warehouse.{kind.kind}")
    attach(store, "wh", str(made.path))
    script = HOLDERS[kind].format(str(made.path)) + "; print('held', flush=True); input()"
    with subprocess.Popen(
        [sys.executable, "-c", script], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True
    ) as holder:
        assert holder.stdout is not None
        assert holder.stdout.readline() == "held\n"
        assert "in use by another program" in refused(pushed, "wh.limits")
        holder.communicate("\n")
    assert pushed("limits", "wh.limits").outcome.added == 5


def guarded(postgres: InPostgres, action: str) -> None:
    """A table of limits in which inserting a row sets off an action of the server."""
    postgres.run("CREATE TABLE limits (route text, limit_s double precision)")
    postgres.run("INSERT INTO limits VALUES ('R0', 99.0)")
    postgres.run(
        "CREATE FUNCTION act() RETURNS trigger LANGUAGE plpgsql AS "
        f"$$ BEGIN PERFORM {action}; RETURN NEW; END $$"
    )
    postgres.run("CREATE TRIGGER acts AFTER INSERT ON limits EXECUTE FUNCTION act()")


def test_a_connection_lost_in_mid_push(postgres: InPostgres, pushed: Push, store: Path) -> None:
    guarded(postgres, "pg_terminate_backend(pg_backend_pid())")
    for mode in ("append", "merge", "replace"):
        assert "the connection to wh was lost" in refused(pushed, "wh.limits", mode)
    assert postgres.rows("SELECT route, limit_s FROM limits") == [("R0", 99.0)]
    assert unconfirmed_in(Store(store)) == []


def test_a_connection_lost_at_the_commit(postgres: InPostgres, pushed: Push, store: Path) -> None:
    guarded(postgres, "1")
    postgres.run("DROP TRIGGER acts ON limits")
    postgres.run(
        "CREATE OR REPLACE FUNCTION act() RETURNS trigger LANGUAGE plpgsql AS "
        "$$ BEGIN PERFORM pg_terminate_backend(pg_backend_pid()); RETURN NEW; END $$"
    )
    postgres.run(
        "CREATE CONSTRAINT TRIGGER acts AFTER INSERT ON limits DEFERRABLE INITIALLY DEFERRED"
        " FOR EACH ROW EXECUTE FUNCTION act()"
    )
    assert "may have arrived" in refused(pushed, "wh.limits", "append")
    (sentence,) = unconfirmed_in(Store(store))
    assert sentence.startswith("The push of limits to wh.limits was begun at ")


def test_a_push_killed_while_the_server_writes(
    postgres: InPostgres, pushed: Push, store: Path, folder: Path
) -> None:
    guarded(postgres, "pg_sleep(120)")
    command = [sys.executable, "-m", "midspread.cli.main", "push", "limits", "wh.limits"]
    running = subprocess.Popen([*command, "--mode", "append"], cwd=folder, env=dict(os.environ))
    sleeping = "SELECT pid FROM pg_stat_activity WHERE wait_event = 'PgSleep'"
    try:
        until = time.monotonic() + 60
        while not (pids := postgres.run(sleeping)) and time.monotonic() < until:
            time.sleep(0.1)
        assert pids
    finally:
        running.send_signal(signal.SIGKILL)
        running.wait()
    ((pid,),) = pids
    postgres.run(f"SELECT pg_terminate_backend({pid})")
    assert postgres.rows("SELECT route, limit_s FROM limits") == [("R0", 99.0)]
    (sentence,) = unconfirmed_in(Store(store))
    assert "was begun at" in sentence
    postgres.run("DROP TRIGGER acts ON limits")
    assert pushed("limits", "wh.limits", "merge").outcome.added == 4
    assert unconfirmed_in(Store(store)) == []


def test_a_table_that_another_session_has_locked(
    postgres: InPostgres, pushed: Push, monkeypatch: pytest.MonkeyPatch
) -> None:
    from adbc_driver_postgresql import dbapi

    monkeypatch.setattr("midspread.engine.pushing.postgres_target._LOCK_WAIT", "200ms")
    pushed("limits", "wh.limits")
    with dbapi.connect(postgres.uri) as other, other.cursor() as cursor:
        cursor.execute("LOCK TABLE limits IN ROW EXCLUSIVE MODE")
        assert "locked by another session" in refused(pushed, "wh.limits", "merge")


@pytest.mark.usefixtures("postgres")
def test_a_server_that_cannot_be_reached(
    pushed: Push, store: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("PGPASSWORD", "not the password")
    sentence = refused(pushed, "wh.limits")
    assert "wh cannot be reached" in sentence
    assert "not the password" not in sentence
    attach(store, "wh", "postgresql://127.0.0.1:1/town")
    assert "wh cannot be reached" in refused(pushed, "wh.limits")


def test_no_password_is_kept(
    postgres: InPostgres, pushed: Push, store: Path, capfd: pytest.CaptureFixture[str]
) -> None:
    pushed("limits", "wh.limits")
    password = os.environ["PGPASSWORD"]
    for path in store.parent.iterdir():
        assert password.encode() not in path.read_bytes()
    assert password not in postgres.record("limits")
    assert password not in "".join(capfd.readouterr())


def test_somebody_elses_comment_is_left(store: Path, folder: Path, pushed: Push) -> None:
    made = InDuckdb(folder / "warehouse.duckdb")
    attach(store, "wh", str(made.path))
    made.run("CREATE TABLE limits (route VARCHAR, limit_s DOUBLE)")
    made.run("COMMENT ON TABLE limits IS 'the drivers'' own'")
    pushed("limits", "wh.limits", "append")
    pushed("limits", "wh.limits", "replace")
    assert made.record("limits") == "the drivers' own"
    assert made.run("SELECT table_name, grid FROM midspread_records") == [("limits", "limits")]


def test_a_file_that_is_no_longer_a_database(store: Path, folder: Path, pushed: Push) -> None:
    made = InDuckdb(folder / "warehouse.duckdb")
    attach(store, "wh", str(made.path))
    made.path.write_bytes(b"Larkmoor Transit " * 1000)
    assert "no longer a DuckDB file" in refused(pushed, "wh.limits")
    assert duckdb.connect().execute("SELECT 1").fetchall() == [(1,)]
