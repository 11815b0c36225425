"""A store of an older format: a copy of it is kept, then it is brought up to date in place."""

from pathlib import Path

import duckdb
import pytest

from midspread.engine.grids.entering import create, enter
from midspread.engine.session import Session
from midspread.engine.store.housekeeping import check
from midspread.engine.store.layout import FORMAT
from midspread.engine.store.store import Store


@pytest.fixture
def old(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A store of format 1, which held answers only, with one of them."""
    monkeypatch.chdir(tmp_path)
    path = tmp_path / "midspread.duckdb"
    with Session(threads=1, store=path) as session:
        session.query("SELECT 1 AS k FROM range(3)")
    with duckdb.connect(str(path)) as opened:
        opened.execute("DROP SCHEMA earlier CASCADE")
        opened.execute("DROP SCHEMA aside CASCADE")
        for table in ("grids", "columns", "entries", "versions", "changes", "undo", "sources"):
            opened.execute(f"DROP TABLE ledger.{table}")
        opened.execute("DELETE FROM ledger.about WHERE name = 'changes'")
        opened.execute("UPDATE ledger.about SET value = '1' WHERE name = 'format'")
    return path


def format_of(path: Path) -> str:
    with duckdb.connect(str(path), read_only=True) as opened:
        query = "SELECT value FROM ledger.about WHERE name = 'format'"
        return str(opened.execute(query).fetchall()[0][0])


def test_an_old_store_is_upgraded_and_a_copy_is_kept(old: Path) -> None:
    create(old, "limits", "route TEXT, limit_s DOUBLE", ["route"])
    enter(old, "limits", ["route", "limit_s"], [["L1", "45"]])
    assert format_of(old) == str(FORMAT)
    assert format_of(old.with_name("midspread.duckdb.format1")) == "1"
    with Session(threads=1, store=old) as session:
        assert session.query("SELECT 1 AS k FROM range(3)").from_store
        assert session.query("FROM limits").rows() == [("L1", 45.0)]
    assert check(Store.open(old)) == []
