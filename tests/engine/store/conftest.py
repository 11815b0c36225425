"""Stores in folders of their own, tables of every type, other programs and other users."""

import contextlib
import os
import shutil
import subprocess
import sys
import tempfile
from collections.abc import Callable, Iterator
from pathlib import Path

import duckdb
import pyarrow as pa
import pytest

from midspread.engine.store.answers import Answers
from midspread.engine.store.store import Store


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "midspread.duckdb"


@pytest.fixture
def store(path: Path) -> Iterator[Store]:
    one = Store.open(path)
    yield one
    one.close()


@pytest.fixture
def answers(store: Store) -> Answers:
    return Answers(store, environment={})


def small_table(number: int = 3) -> pa.Table:
    return pa.table({"route": list(range(number)), "dwell_s": [1.5 * i for i in range(number)]})


def noise(size: int) -> pa.Table:
    """A table whose content cannot be compressed."""
    return pa.table({"noise": pa.array([os.urandom(size)], pa.large_binary())})


@contextlib.contextmanager
def nobody() -> Iterator[Path]:
    """A folder, and no right to write there; as root, by acting for the user nobody."""
    folder = Path(tempfile.mkdtemp())
    is_root = os.geteuid() == 0
    folder.chmod(0o755)
    try:
        yield folder
    finally:
        if is_root:
            os.seteuid(0)
        folder.chmod(0o755)
        shutil.rmtree(folder)


def give_up_writing(folder: Path) -> None:
    """From here on the folder and all in it can only be read."""
    for path in (*folder.rglob("*"), folder):
        path.chmod(0o555 if path.is_dir() else 0o444)
    if os.geteuid() == 0:
        os.seteuid(65534)


@pytest.fixture
def start(tmp_path: Path) -> Iterator[Callable[..., "subprocess.Popen[str]"]]:
    """Start Python programs; whatever still runs at the end is killed."""
    running: list[subprocess.Popen[str]] = []

    def run(code: str, *arguments: object) -> "subprocess.Popen[str]":
        program = subprocess.Popen(
            [sys.executable, "-c", code, *map(str, arguments)],
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            stdin=subprocess.PIPE,
            text=True,
            cwd=tmp_path,
        )
        running.append(program)
        return program

    yield run
    for program in running:
        if program.poll() is None:
            program.kill()
        program.communicate()


HOLD = """
import duckdb, sys, time
connection = duckdb.connect(sys.argv[1], read_only=sys.argv[2] == "reading")
print("held", flush=True)
sys.stdin.readline() if sys.argv[3] == "-" else time.sleep(float(sys.argv[3]))
connection.close()
"""


def other_database(path: Path) -> bytes:
    with duckdb.connect(path) as other:
        other.execute("CREATE TABLE t AS SELECT 1 AS a")
    return path.read_bytes()
