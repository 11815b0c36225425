"""Taking changes back: the grid is as it was, and what rests on it is as fresh as it was."""

from pathlib import Path

import pytest

from midspread.engine.errors import MidspreadError
from midspread.engine.grids.columns import add_column
from midspread.engine.grids.comparing import changes
from midspread.engine.grids.discarding import discard
from midspread.engine.grids.entering import create, enter
from midspread.engine.grids.keeping_versions import keep_versions
from midspread.engine.grids.refreshing import refresh
from midspread.engine.grids.restoring import undo
from midspread.engine.grids.versions import history
from midspread.engine.session import Session
from midspread.engine.store.housekeeping import check
from midspread.engine.store.store import Store
from tests.engine.grids.conftest import Keep, write_month
from tests.engine.grids.test_keeping import BY_ROUTE, rows, states


@pytest.fixture
def doubled(store: Path, kept: Keep) -> Path:
    """A store with limits and a grid that rests on them."""
    create(store, "limits", "route TEXT, limit_s DOUBLE", ["route"])
    enter(store, "limits", ["route", "limit_s"], [["R1", "45"]])
    kept("doubled", "SELECT route, 2 * limit_s AS v FROM limits", key=["route"])
    return store


def take_back(store: Path, name: str | None = None) -> str:
    opened = Store.open(store)
    with opened.writing() as engine:
        names, action = undo(engine, name)
    opened.close()
    return f"{names}: {action}"


def fresh(store: Path) -> set[str]:
    return {name for name, (state, _) in states(store).items() if state == "fresh"}


def test_what_rests_on_it_is_fresh_again(doubled: Path) -> None:
    enter(doubled, "limits", ["route", "limit_s"], [["R1", "50"]])
    assert fresh(doubled) == {"limits"}
    assert take_back(doubled).startswith("limits: entered limit_s")
    assert fresh(doubled) == {"limits", "doubled"}
    discard(doubled, "limits", with_dependents=True)
    take_back(doubled, "doubled")
    assert fresh(doubled) == {"limits", "doubled"}
    assert rows("FROM doubled") == [("R1", 90.0)]


def test_the_same_value_again_leaves_all_fresh(doubled: Path) -> None:
    done = enter(doubled, "limits", ["route", "limit_s"], [["R1", "45.0"]], "asked again")
    assert (done.new, done.cells) == (0, 0)
    assert fresh(doubled) == {"limits", "doubled"}
    last = history(doubled, "limits").to_pylist()[0]
    assert (last["action"], last["note"]) == ("noted", "asked again")
    assert take_back(doubled, "limits").startswith("limits: entered")


def test_a_refresh_that_changed_nothing_is_no_change(kept: Keep, store: Path, folder: Path) -> None:
    kept("by_route", BY_ROUTE)
    add_column(store, "by_route", "remark TEXT")
    write_month(folder, "2031-01", 60)  # the same rows in a newer file
    (made,) = refresh(lambda: Session(threads=1), store)
    assert not made.is_changed
    enter(store, "by_route", ["route", "remark"], [["R1", "seen"]])
    assert take_back(store).startswith("by_route: entered remark")
    assert take_back(store) == "by_route: column added remark"
    assert rows("SELECT count(*) FROM by_route") == [(3,)]


def test_a_query_replaced_with_the_same_result_is_taken_back(kept: Keep, store: Path) -> None:
    kept("one", "SELECT 1 AS k", key=["k"])
    kept("one", "SELECT 2 - 1 AS k", key=["k"], replacing=True)
    assert history(store, "one").to_pylist()[0]["note"] == "query replaced, with the same result"
    enter_other = create(store, "other", "k INTEGER", ["k"])
    assert take_back(store) == f"{enter_other.name}: created"
    assert take_back(store) == "one: keep"
    with Session(use_store=False) as session:
        from midspread.engine.grids.refreshing import look

        assert look(session, store)[0]["one"].sql == "SELECT 1 AS k"


def test_a_discarded_grid_does_not_replace_a_newer_one(doubled: Path) -> None:
    discard(doubled, "limits", with_dependents=True)
    create(doubled, "limits", "route TEXT, limit_s DOUBLE", ["route"])
    enter(doubled, "limits", ["route", "limit_s"], [["R1", "99"]])
    with pytest.raises(MidspreadError, match="limits cannot come back, as another"):
        take_back(doubled, "doubled")
    assert rows("FROM limits") == [("R1", 99.0)]


def test_versions_let_go_of_do_not_come_back_empty(kept: Keep, store: Path, folder: Path) -> None:
    kept("by_route", BY_ROUTE)
    assert keep_versions(store, 1) == 0
    for month in (3, 4):
        write_month(folder, f"2031-0{month}", 30)
        list(refresh(lambda: Session(threads=1), store))
    assert take_back(store) == "by_route: refresh"
    opened = Store.open(store)
    assert check(opened) == []
    opened.close()
    with pytest.raises(MidspreadError, match="those kept are 2"):
        changes(store, "by_route", 1, 2)
