"""Typed-in values: types, keys, notes, and following their rows."""

from pathlib import Path

import openpyxl
import pytest

from midspread.engine.errors import MidspreadError, UsageError
from midspread.engine.grids.columns import add_column, drop_column
from midspread.engine.grids.entering import create, delete, enter
from midspread.engine.grids.entries import set_aside
from midspread.engine.grids.refreshing import refresh
from midspread.engine.grids.restoring import undo
from midspread.engine.grids.sheets import read_sheet
from midspread.engine.grids.versions import history
from midspread.engine.session import Session
from midspread.engine.store.store import Store
from tests.engine.grids.conftest import Keep, write_month
from tests.engine.grids.test_keeping import BY_ROUTE, grid_of, rows, states

COLUMNS = "route TEXT, share DOUBLE, limit_s DECIMAL(6, 1), since DATE, who TEXT"


@pytest.fixture
def limits(store: Path) -> Path:
    """A store with an empty grid of limits."""
    create(store, "limits", COLUMNS, ["route"])
    return store


def take_back(store: Path) -> None:
    opened = Store.open(store)
    with opened.writing() as engine:
        undo(engine)
    opened.close()


def test_rows_are_made_then_changed(limits: Path) -> None:
    done = enter(limits, "limits", ["route", "share", "who"], [["R1", "0.1", ""]], "a survey")
    assert (done.new, done.cells) == (1, 2)
    assert rows("SELECT share, who, limit_s FROM limits") == [(0.1, "", None)]
    done = enter(limits, "limits", ["who", "ROUTE"], [[None, "R1"]])
    assert (done.new, done.cells) == (0, 1)
    assert rows("SELECT route, share, who FROM limits") == [("R1", 0.1, None)]
    assert grid_of(limits, "limits").rows == 1


def test_the_log_holds_every_change_with_its_note(limits: Path) -> None:
    enter(limits, "limits", ["route", "share"], [["R1", "0.1"]], "a survey")
    enter(limits, "limits", ["route", "share"], [["R1", "0.2"]], "another")
    log = history(limits, "limits").to_pylist()
    found = [
        (line["action"], line["column"], line["old"], line["new"], line["note"]) for line in log
    ]
    assert found == [
        ("entered", "share", "0.1", "0.2", "another"),
        ("entered", "share", None, "0.1", "a survey"),
        ("created", None, None, None, None),
    ]


@pytest.mark.parametrize(
    ("columns", "values", "words"),
    [
        (["route", "share"], ["R1", "x"], "takes DOUBLE, and 'x' is none"),
        (["route", "share"], ["R1", ""], "share=NULL"),
        (["route", "limit_s"], ["R1", "123456789"], "DECIMAL"),
        (["route", "since"], ["R1", "2031-02-30"], "DATE"),
        (["share"], ["0.1"], "route is not given"),
        (["route", "shore"], ["R1", "1"], "did you mean share"),
        (["route", "route"], ["R1", "R2"], "twice"),
        (["route", "share"], [None, "1"], "cannot be NULL"),
    ],
)
def test_what_does_not_fit_changes_nothing(
    limits: Path, columns: list[str], values: list[str | None], words: str
) -> None:
    enter(limits, "limits", ["route", "share"], [["R1", "0.1"]])
    with pytest.raises(MidspreadError, match=words):
        enter(limits, "limits", columns, [values])
    assert rows("SELECT route, share FROM limits") == [("R1", 0.1)]


@pytest.mark.parametrize(
    ("columns", "keys"),
    [
        ("route", ["route"]),
        ("route TEXT, route DOUBLE", ["route"]),
        ("route NONSENSE", ["route"]),
        ("route TEXT); DROP TABLE x; --", ["route"]),
        ("route TEXT DEFAULT (SELECT 1)", ["route"]),
        ("route TEXT", ["stop"]),
    ],
)
def test_columns_that_cannot_be(store: Path, columns: str, keys: list[str]) -> None:
    with pytest.raises(UsageError):
        create(store, "limits", columns, keys)
    assert states(store) == {} if store.exists() else True


def test_composite_keys_and_one_key_twice(store: Path) -> None:
    create(store, "pairs", "route TEXT, part TEXT, limit_s INTEGER", ["route", "part"])
    enter(store, "pairs", ["route", "part", "limit_s"], [["R1", "peak", "1"], ["R1", "early", "2"]])
    enter(store, "pairs", ["route", "part", "limit_s"], [["R1", "peak", "3"]])
    assert rows("SELECT part, limit_s FROM pairs ORDER BY part") == [("early", 2), ("peak", 3)]
    with pytest.raises(MidspreadError, match="given twice"):
        enter(store, "pairs", ["route", "part"], [["R1", "peak"], ["R1", "peak"]])


def test_keys_are_compared_as_their_type_not_as_text(store: Path) -> None:
    create(store, "numbers", "k INTEGER, v TEXT", ["k"])
    enter(store, "numbers", ["k", "v"], [["7", "a"]])
    done = enter(store, "numbers", ["k", "v"], [["007", "b"]])
    assert done.new == 0
    assert rows("FROM numbers") == [(7, "b")]


def test_delete_and_undo(limits: Path) -> None:
    enter(limits, "limits", ["route", "share"], [["R1", "0.1"], ["R2", "0.2"]])
    delete(limits, "limits", ["route"], ["R1"])
    assert rows("SELECT route FROM limits") == [("R2",)]
    take_back(limits)
    assert rows("SELECT route FROM limits ORDER BY route") == [("R1",), ("R2",)]
    assert grid_of(limits, "limits").rows == 2
    take_back(limits)
    assert rows("SELECT count(*) FROM limits") == [(0,)]
    with pytest.raises(MidspreadError, match="no row with the key"):
        delete(limits, "limits", ["route"], ["R9"])


def test_a_grid_that_reads_limits_goes_stale(limits: Path, kept: Keep) -> None:
    enter(limits, "limits", ["route", "share"], [["R1", "0.1"]])
    kept("wide", "SELECT max(share) AS most FROM limits")
    enter(limits, "limits", ["route", "share"], [["R1", "0.3"]])
    state, why = states(limits)["wide"]
    assert state == "stale" and why[0].startswith("limits changed at ")
    list(refresh(lambda: Session(threads=1), limits))
    assert rows("FROM wide") == [(0.3,)]


def test_typed_in_values_follow_their_rows(kept: Keep, store: Path, folder: Path) -> None:
    kept("by_route", BY_ROUTE)
    add_column(store, "by_route", "remark TEXT")
    enter(store, "by_route", ["route", "remark"], [["R2", "clock replaced"]], "seen")
    write_month(folder, "2031-03", 30)
    list(refresh(lambda: Session(threads=1), store))
    assert rows("SELECT route, remark FROM by_route ORDER BY 1") == [
        ("R0", None),
        ("R1", None),
        ("R2", "clock replaced"),
    ]
    kept("by_route", BY_ROUTE.replace("GROUP", "WHERE route <> 'R2' GROUP"), replacing=True)
    assert rows("SELECT count(remark) FROM by_route") == [(0,)]
    grid = grid_of(store, "by_route")
    opened = Store.open(store)
    with opened.reading() as engine:
        aside = set_aside(engine, grid)
    opened.close()
    assert aside == [('["R2"]', "remark", "clock replaced")]
    kept("by_route", BY_ROUTE, replacing=True)
    assert rows("SELECT remark FROM by_route WHERE route = 'R2'") == [("clock replaced",)]


def test_computed_columns_follow_every_change(kept: Keep, store: Path, folder: Path) -> None:
    kept("by_route", BY_ROUTE)
    add_column(store, "by_route", "allowed DOUBLE")
    add_column(store, "by_route", "spare AS (allowed - total)")
    add_column(store, "by_route", "is_over AS (spare < 0)")
    enter(store, "by_route", ["route", "allowed"], [["R1", "1000"]])
    asked = "SELECT allowed - total, spare, is_over FROM by_route WHERE route = 'R1'"
    expected, spare, is_over = rows(asked)[0]
    assert (spare, is_over) == (expected, False)
    write_month(folder, "2031-03", 300)
    list(refresh(lambda: Session(threads=1), store))
    expected, spare, is_over = rows(asked)[0]
    assert (spare, is_over) == (expected, True)
    with pytest.raises(MidspreadError, match="is_over of by_route rests on spare"):
        drop_column(store, "by_route", "spare")
    drop_column(store, "by_route", "is_over")
    take_back(store)
    assert rows(asked)[0][2] is True


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("x AS (x + 1)", "circle"),
        ("x AS (sum(total))", "own columns"),
        ("x AS ((SELECT 1))", "own columns"),
        ("x AS (nowhere + 1)", "nowhere"),
        ("x AS (1, 2)", "cannot be computed|single|no expression"),
        ("x AS (1); DROP TABLE t", "brackets|no expression"),
        ("total DOUBLE", "already"),
    ],
)
def test_columns_that_are_refused(kept: Keep, store: Path, text: str, words: str) -> None:
    kept("by_route", BY_ROUTE)
    with pytest.raises(MidspreadError, match=words):
        add_column(store, "by_route", text)
    assert [column.name for column in grid_of(store, "by_route").columns] == ["route", "n", "total"]


def test_our_row_functions_in_a_computed_column(kept: Keep, store: Path) -> None:
    kept("by_route", BY_ROUTE)
    add_column(store, "by_route", "logged AS (rung(total, 0))")
    assert rows("SELECT max(abs(logged - ln(total))) < 1e-12 FROM by_route") == [(True,)]


@pytest.mark.parametrize("ending", ["csv", "xlsx"])
def test_rows_from_a_file(limits: Path, folder: Path, ending: str) -> None:
    path = folder / f"limits.{ending}"
    if ending == "csv":
        path.write_text('route,share,who\nR1,0.1,""\nR2,,"a, b"\n', encoding="utf-8")
    else:
        book = openpyxl.Workbook()
        for line in (["route", "share", "who"], ["R1", 0.1, "c"], ["R2", None, "a, b"]):
            book.active.append(line)
        book.save(path)
    header, lines = read_sheet(path)
    assert enter(limits, "limits", header, lines).new == 2
    first = "" if ending == "csv" else "c"
    assert rows("SELECT route, share, who FROM limits ORDER BY 1") == [
        ("R1", 0.1, first),
        ("R2", None, "a, b"),
    ]
