"""A folder with a few settled files and an engine to read them."""

import os
import time
from collections.abc import Callable, Iterator
from pathlib import Path

import duckdb
import pytest

from midspread.engine.inputs import files


@pytest.fixture
def engine() -> Iterator[duckdb.DuckDBPyConnection]:
    """An in-memory engine set up as the session does."""
    connection = duckdb.connect(config={"threads": 2})
    connection.execute("SET python_enable_replacements = false")
    yield connection
    connection.close()


@pytest.fixture
def settle(monkeypatch: pytest.MonkeyPatch) -> Callable[[], None]:
    """Let three seconds pass for the fingerprints, without waiting."""

    def later() -> None:
        then = time.time_ns() + 3_000_000_000
        monkeypatch.setattr("midspread.engine.inputs.fingerprints.now_ns", lambda: then)

    return later


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, settle: Callable[[], None]) -> Path:
    """The current folder, holding dwell/2031-01.parquet, dwell/2031-02.parquet and stops.csv."""
    monkeypatch.chdir(tmp_path)
    (tmp_path / "dwell").mkdir()
    for month in ("2031-01", "2031-02"):
        write_month(tmp_path / "dwell" / f"{month}.parquet")
    (tmp_path / "stops.csv").write_text("stop,name\n1,Mill Lane\n2,Harbour\n")
    settle()
    return tmp_path


def write_month(path: Path, visits: int = 50) -> None:
    """Write a month of visits."""
    duckdb.execute(
        "COPY (SELECT range AS visit, range % 3 AS route, range * 1.5 AS dwell_s FROM range($n))"
        f" TO '{path}' (FORMAT parquet)",
        {"n": visits},
    )


def replace_keeping_times(path: Path, content: bytes) -> None:
    """Write other content of the same size and give the file its old times back."""
    before = path.stat()
    assert len(content) == before.st_size
    path.write_bytes(content)
    os.utime(path, ns=(before.st_atime_ns, before.st_mtime_ns))


assert files.COARSE_GRAIN_NS < 3_000_000_000
