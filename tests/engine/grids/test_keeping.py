"""Keeping, going stale, refreshing, taking back."""

import os
from pathlib import Path

import duckdb
import pytest

from midspread.engine.errors import MidspreadError, StoreTooNew, UsageError
from midspread.engine.grids import ledger
from midspread.engine.grids.freshness import State
from midspread.engine.grids.model import Grid
from midspread.engine.grids.refreshing import Refreshed, look, refresh
from midspread.engine.grids.restoring import undo
from midspread.engine.session import Session
from midspread.engine.store.store import Store
from tests.engine.grids.conftest import Keep, write_month

BY_ROUTE = "SELECT route, count(*) AS n, sum(dwell_s) AS total FROM '2031-*.parquet' GROUP BY route"


def refreshed(store: Path, *names: str) -> list[Refreshed]:
    return list(refresh(lambda: Session(threads=1), store, names))


def states(store: Path) -> dict[str, tuple[str, tuple[str, ...]]]:
    with Session(use_store=False) as session:
        found = look(session, store)[1]
    return {name: (str(one.state), one.why) for name, one in found.items()}


def rows(sql: str) -> list[tuple[object, ...]]:
    with Session(threads=1) as session:
        return session.query(sql).rows()


def grid_of(store: Path, name: str) -> Grid:
    opened = Store.open(store)
    with opened.reading() as engine:
        found = ledger.grids(engine)[name]
    opened.close()
    return found


def test_a_kept_grid_is_a_table_for_later_queries_and_other_clients(
    kept: Keep, store: Path
) -> None:
    made = kept("by_route", BY_ROUTE)
    assert made.is_new and made.is_key_inferred
    assert made.grid.keys == ("route",)
    assert rows("SELECT n FROM by_route ORDER BY route") == [(40,), (40,), (40,)]
    with duckdb.connect(str(store), read_only=True) as other:
        assert other.execute("SELECT sum(n) FROM by_route").fetchall() == [(120,)]


def test_the_record_says_what_it_rests_on(kept: Keep, folder: Path) -> None:
    kept("by_route", "SELECT route, mad_scale(dwell_s) AS s FROM '2031-*.parquet' GROUP BY 1")
    record = kept("wide", "SELECT max(s) AS s FROM by_route").grid.record
    assert list(record.grids) == ["by_route"]
    assert record.files == {}
    record = kept("again", BY_ROUTE).grid.record
    found = [Path(state[0]) for state in record.files["2031-*.parquet"]]
    assert found == [folder / "2031-01.parquet", folder / "2031-02.parquet"]
    assert record.obstacle == "" and record.duckdb == duckdb.__version__


def test_a_new_file_makes_it_stale_and_what_rests_on_it(
    kept: Keep, store: Path, folder: Path
) -> None:
    kept("by_route", BY_ROUTE)
    kept("most", "SELECT max(total) AS most FROM by_route")
    kept("other", "SELECT 1 AS one")
    assert {state for state, _ in states(store).values()} == {"fresh"}
    write_month(folder, "2031-03", 30)
    found = states(store)
    assert found["by_route"] == ("stale", ("2031-03.parquet is new",))
    assert found["most"] == ("stale", ("by_route is stale",))
    assert found["other"] == ("fresh", ())
    made = refreshed(store)
    assert [(one.grid.name, one.grid.version, one.is_changed) for one in made] == [
        ("by_route", 2, True),
        ("most", 2, True),
    ]
    assert rows("SELECT sum(n) FROM by_route") == [(150,)]
    assert {state for state, _ in states(store).values()} == {"fresh"}
    assert refreshed(store) == []


def test_a_file_touched_but_not_changed_stops_where_the_result_is_the_same(
    kept: Keep, store: Path, folder: Path
) -> None:
    kept("by_route", BY_ROUTE)
    kept("most", "SELECT max(total) AS most FROM by_route")
    os.utime(folder / "2031-01.parquet")
    made = refreshed(store)
    assert [(one.grid.name, one.is_changed) for one in made] == [("by_route", False)]
    assert grid_of(store, "by_route").version == 1
    assert {state for state, _ in states(store).values()} == {"fresh"}


def test_a_failure_keeps_the_last_good_rows_and_the_others_go_on(
    kept: Keep, store: Path, folder: Path
) -> None:
    kept("by_route", BY_ROUTE)
    kept("most", "SELECT max(total) AS most FROM by_route")
    kept("january", "SELECT count(*) AS n FROM '2031-01.parquet'")
    before = rows("SELECT * FROM by_route ORDER BY ALL")
    (folder / "2031-02.parquet").write_bytes(b"no parquet")
    write_month(folder, "2031-01", 50)
    made = {one.grid.name: one for one in refreshed(store)}
    assert made["by_route"].failure and made["most"].is_skipped
    assert made["january"].is_changed
    assert rows("SELECT * FROM by_route ORDER BY ALL") == before
    assert states(store)["by_route"][0] == State.FAILED
    write_month(folder, "2031-02", 10)
    assert [one.failure for one in refreshed(store)] == ["", ""]
    assert {state for state, _ in states(store).values()} == {"fresh"}


def test_a_failed_keep_leaves_the_store_as_it_was(kept: Keep, store: Path) -> None:
    kept("by_route", BY_ROUTE)
    kept("most", "SELECT max(total) AS most FROM by_route")
    before = rows("SELECT * FROM by_route ORDER BY ALL")
    for name, sql, options, words in (
        ("by_route", "SELECT 1 AS a", {}, "already"),
        ("by_route", "SELECT most FROM most", {"replacing": True}, "rest on itself"),
        ("twice", "SELECT 1 AS k UNION ALL SELECT 1", {"key": ["k"]}, "key"),
        ("gone", "FROM nowhere", {}, "nowhere"),
        ("two", "SELECT 1; SELECT 2", {}, "one SELECT"),
        ("lost", "SELECT 1 AS a", {"key": ["b"]}, "no column"),
    ):
        with pytest.raises(MidspreadError, match=words):
            kept(name, sql, **options)
    assert rows("SELECT * FROM by_route ORDER BY ALL") == before
    assert sorted(states(store)) == ["by_route", "most"]


@pytest.mark.parametrize("name", ["a.b", "", "main", "_own", "x/y", "a*"])
def test_names_that_would_be_taken_for_something_else(kept: Keep, name: str) -> None:
    with pytest.raises(UsageError):
        kept(name, "SELECT 1 AS a")


def test_a_replaced_query_and_undo(kept: Keep, store: Path) -> None:
    kept("one", "SELECT 1 AS a")
    kept("one", "SELECT 2 AS a, 3 AS b", replacing=True)
    assert rows("FROM one") == [(2, 3)]
    opened = Store.open(store)
    with opened.writing() as engine:
        assert undo(engine) == ("one", "keep")
    assert rows("FROM one") == [(1,)]
    with opened.writing() as engine:
        undo(engine, "one")
    opened.close()
    assert states(store) == {}
    with pytest.raises(MidspreadError, match="there is no table one"):
        rows("FROM one")


def test_kept_for_later(kept: Keep, store: Path) -> None:
    kept("by_route", BY_ROUTE, later=True)
    assert states(store)["by_route"] == ("stale", ("it has not been computed yet",))
    assert [one.grid.keys for one in refreshed(store)] == [("route",)]
    assert rows("SELECT count(*) FROM by_route") == [(3,)]


def test_an_answer_over_a_grid_is_kept_until_the_grid_changes(
    kept: Keep, store: Path, folder: Path
) -> None:
    kept("by_route", BY_ROUTE)
    asked = "SELECT sum(n) FROM by_route"
    assert rows(asked) == [(120,)]
    with Session(threads=1) as session:
        assert session.query(asked).from_store is not None
    write_month(folder, "2031-03", 30)
    with Session(threads=1) as session:
        answer = session.query(asked)
        assert answer.rows() == [(120,)]
        assert any("2031-03.parquet is new" in line for line in answer.notices)
    refreshed(store)
    assert rows(asked) == [(150,)]


def test_a_grid_computed_at_random_says_so(kept: Keep) -> None:
    assert "random" in kept("chance", "SELECT random() AS r").grid.record.obstacle


def test_a_store_of_the_first_format_is_upgraded_beside_a_copy(store: Path, kept: Keep) -> None:
    opened = Store.open(store)
    with opened.writing() as engine:
        for table in ("grids", "columns", "entries", "versions", "changes", "undo", "sources"):
            engine.execute(f"DROP TABLE store.ledger.{table}")
        engine.execute("DROP SCHEMA store.earlier; DROP SCHEMA store.aside")
        engine.execute("DELETE FROM store.ledger.about WHERE name = 'changes'")
        engine.execute("UPDATE store.ledger.about SET value = '1' WHERE name = 'format'")
    opened.close()
    kept("one", "SELECT 1 AS a")
    assert rows("FROM one") == [(1,)]
    copy = store.with_name(store.name + ".format1")
    with duckdb.connect(str(copy), read_only=True) as other:
        found = other.execute("SELECT value FROM ledger.about WHERE name = 'format'").fetchall()
    assert found == [("1",)]


def test_a_newer_store_is_refused(kept: Keep, store: Path) -> None:
    kept("one", "SELECT 1 AS a")
    opened = Store.open(store)
    with opened.writing() as engine:
        engine.execute("UPDATE store.ledger.about SET value = '99' WHERE name = 'format'")
    opened.close()
    with pytest.raises(StoreTooNew):
        kept("two", "SELECT 1 AS a")
