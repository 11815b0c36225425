"""A folder with two months of visits and a store of its own."""

from collections.abc import Callable
from pathlib import Path

import duckdb
import pytest

from midspread.engine.grids.keeping import Kept, keep
from midspread.engine.session import Session

Keep = Callable[..., Kept]


def write_month(folder: Path, month: str, rows: int, seconds: float = 10.0) -> None:
    """A file of visits; the later the row the longer it took."""
    with duckdb.connect() as connection:
        connection.execute(
            f"COPY (SELECT 'R' || (i % 3) AS route, i % 5 AS vehicle, {seconds} + i / 8.0 AS"
            f" dwell_s FROM range({rows}) AS rows(i)) TO '{folder}/{month}.parquet'"
            " (FORMAT parquet)"
        )


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """The current folder of a test."""
    monkeypatch.chdir(tmp_path)
    monkeypatch.delenv("MIDSPREAD_STORE", raising=False)
    write_month(tmp_path, "2031-01", 60)
    write_month(tmp_path, "2031-02", 60, 12.0)
    return tmp_path


@pytest.fixture
def store(folder: Path) -> Path:
    """Where the store of the folder is."""
    return folder / "midspread.duckdb"


@pytest.fixture
def kept(store: Path) -> Keep:
    """``kept("name", "SELECT …")``: keep a grid with a session of its own."""

    def one(name: str, sql: str, **options: object) -> Kept:
        with Session(threads=1) as session:
            return keep(session, store, name, sql, **options)  # type: ignore[arg-type]

    return one
