"""Versions compared, records verified, grids discarded."""

import json
from pathlib import Path

import pytest

from midspread.engine.errors import MidspreadError
from midspread.engine.grids.columns import add_column
from midspread.engine.grids.comparing import changes
from midspread.engine.grids.discarding import discard
from midspread.engine.grids.entering import create, enter
from midspread.engine.grids.keeping_versions import VERSIONS_SETTING
from midspread.engine.grids.records import read_record, record_of, verify
from midspread.engine.grids.refreshing import look, refresh
from midspread.engine.grids.resting import tree_above, tree_below
from midspread.engine.grids.restoring import undo
from midspread.engine.grids.versions import history
from midspread.engine.session import Session
from midspread.engine.store.housekeeping import check, pack
from midspread.engine.store.store import Store
from tests.engine.grids.conftest import Keep, write_month
from tests.engine.grids.test_keeping import BY_ROUTE, rows, states

WITH_ERROR = (
    "SELECT route, avg(dwell_s) AS dwell, count(*) AS n, 0.3 AS dwell_se FROM '2031-*.parquet'"
    " WHERE NOT (route = 'R2' AND (SELECT count(*) FROM '2031-*.parquet') > 120) GROUP BY route"
)


def test_what_changed_by_key_and_in_standard_errors(kept: Keep, store: Path, folder: Path) -> None:
    kept("by_route", WITH_ERROR)
    old = dict(rows("SELECT route, dwell FROM by_route"))
    write_month(folder, "2031-03", 30, 100.0)
    list(refresh(lambda: Session(threads=1), store))
    new = dict(rows("SELECT route, dwell FROM by_route"))
    found = changes(store, "by_route")
    assert (found.first, found.last) == (1, 2)
    lines = found.table.to_pylist()
    assert found.count == len(lines)
    assert [line["route"] for line in lines if line["what"] == "gone"] == ["R2"]
    dwell = {line["route"]: line for line in lines if line["column"] == "dwell"}
    for route in ("R0", "R1"):
        change = new[route] - old[route]
        assert dwell[route]["change"] == pytest.approx(change)
        assert dwell[route]["in_se"] == pytest.approx(change / (0.3 * 2**0.5))
    assert changes(store, "by_route", 2, 1).count == found.count
    ends = changes(store, "by_route", ends=(1, 1), memory="100MB").table.to_pylist()
    assert ends == [lines[0], lines[-1]]
    only = changes(store, "by_route", columns=["N"]).table.to_pylist()
    assert {line["column"] for line in only} == {"n", None}
    with pytest.raises(MidspreadError, match="no column dwel; did you mean dwell"):
        changes(store, "by_route", columns=["dwel"])


def test_only_so_many_versions_are_kept(kept: Keep, store: Path, folder: Path) -> None:
    kept("by_route", BY_ROUTE)
    opened = Store.open(store)
    with opened.writing() as engine:
        engine.execute("INSERT INTO store.ledger.about VALUES ($1, '2')", [VERSIONS_SETTING])
    opened.close()
    for month in range(3, 7):
        write_month(folder, f"2031-0{month}", 30)
        list(refresh(lambda: Session(threads=1), store))
    assert changes(store, "by_route", 4, 5).count
    with pytest.raises(MidspreadError, match="not kept; those kept are 3, 4, 5"):
        changes(store, "by_route", 1, 5)
    log = history(store, "by_route").to_pylist()
    assert [line["version"] for line in log] == [5, 4, 3, 2, 1]
    assert log[0]["note"] == "2031-06.parquet is new"


def test_a_record_is_computed_again_to_the_last_digit(
    kept: Keep, store: Path, folder: Path
) -> None:
    create(store, "limits", "route TEXT, limit_s DOUBLE", ["route"])
    enter(store, "limits", ["route", "limit_s"], [["R1", "0.1"], ["R2", None]])
    kept("by_route", BY_ROUTE)
    add_column(store, "by_route", "remark TEXT")
    enter(store, "by_route", ["route", "remark"], [["R1", "seen"]])
    kept(
        "joined",
        "SELECT route, total - limit_s AS left_s, remark FROM by_route JOIN limits USING (route)",
        key=["route"],
    )
    path = folder / "record.json"
    path.write_text(json.dumps(record_of(store, "joined")), encoding="utf-8")

    def again() -> list[tuple[str, bool]]:
        found = verify(lambda place: Session(threads=1, store=place), read_record(path))
        return [(one.grid, one.agrees) for one in found]

    assert sorted(again()) == [("by_route", True), ("joined", True), ("limits", True)]
    write_month(folder, "2031-01", 61)
    assert ("by_route", False) in again()


def test_a_record_names_functions_by_whole_words_and_their_seeds(kept: Keep, store: Path) -> None:
    kept(
        "folds",
        "SELECT route, fold(route, 5) AS held_out, n AS folding FROM (SELECT 'R1' AS"
        " route, 1 AS n)",
    )
    (step,) = record_of(store, "folds")["steps"]
    assert (step["functions"], step["seeds"]) == ({"fold": 1}, {"fold": 0})
    kept("words", "SELECT 1 AS trimmed_mean_of_all")
    (step,) = record_of(store, "words")["steps"]
    assert step["functions"] == {}


def test_a_long_tree_names_each_branch_once(kept: Keep, store: Path) -> None:
    kept("base", "SELECT 1 AS v")
    for place in range(3):
        below = f"pair_{place - 1}" if place else "base"
        kept(f"left_{place}", f"SELECT v FROM {below}")
        kept(f"pair_{place}", f"SELECT a.v FROM left_{place} AS a, {below} AS b")
    with Session(use_store=False) as session:
        grids, _ = look(session, store)
    lines = list(tree_below(grids, "pair_2"))
    assert len(lines) == 9  # and not 2 to the power of the depth
    assert (0, "pair_1 (derived)") in lines and (1, "pair_1 (derived, as above)") in lines


def test_what_rests_on_what(kept: Keep, store: Path) -> None:
    kept("by_route", BY_ROUTE)
    kept("most", "SELECT max(total) AS most FROM by_route")
    with Session(use_store=False) as session:
        grids, _ = look(session, store)
    assert list(tree_below(grids, "most")) == [
        (0, "by_route (derived)"),
        (1, "2031-*.parquet (2 files)"),
    ]
    assert list(tree_above(grids, "by_route")) == [(0, "most (derived)")]


def test_discard_is_refused_while_others_rest_on_it(kept: Keep, store: Path) -> None:
    kept("by_route", BY_ROUTE)
    kept("most", "SELECT max(total) AS most FROM by_route")
    before = rows("SELECT * FROM by_route ORDER BY ALL")
    with pytest.raises(MidspreadError, match="most rests on by_route"):
        discard(store, "by_route")
    assert discard(store, "by_route", with_dependents=True) == ["by_route", "most"]
    assert states(store) == {}
    opened = Store.open(store)
    with opened.writing() as engine:
        assert undo(engine) == ("by_route, most", "discard")
    opened.close()
    assert rows("SELECT * FROM by_route ORDER BY ALL") == before
    assert sorted(states(store)) == ["by_route", "most"]


def test_check_finds_what_was_tampered_with_and_pack_lets_go(kept: Keep, store: Path) -> None:
    kept("by_route", BY_ROUTE)
    kept("most", "SELECT max(total) AS most FROM by_route")
    discard(store, "most")
    opened = Store.open(store)
    assert check(opened) == []
    pack(opened)
    assert check(opened) == []
    with opened.writing() as engine, pytest.raises(MidspreadError, match="no change"):
        undo(engine)
    with opened.writing() as engine:
        engine.execute("DELETE FROM store.main.by_route WHERE route = 'R1'")
    faults = check(opened)
    opened.close()
    assert faults == ["Grid by_route has 2 rows where 3 were noted."]
