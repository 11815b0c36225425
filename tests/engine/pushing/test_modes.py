"""Pushing to each kind of database: what becomes of the rows, and what is foretold of it."""

import json
import random
from pathlib import Path

import pytest

from midspread.engine.errors import MidspreadError
from midspread.engine.grids.records import read_record, verify
from midspread.engine.grids.restoring import undo
from midspread.engine.grids.versions import history
from midspread.engine.pushing.intents import unconfirmed_in
from midspread.engine.pushing.target import Outcome
from midspread.engine.session import Session
from midspread.engine.store.store import Store
from tests.engine.pushing.conftest import Keep, Push, Warehouse

Limits = dict[str | None, float | None]


def query(limits: Limits) -> str:
    """A query for some limits by route."""
    rows = ", ".join(
        f"({'NULL' if route is None else repr(route)}, "
        f"{'NULL' if limit is None else limit}::DOUBLE)"
        for route, limit in limits.items()
    )
    return f"SELECT route, limit_s FROM (VALUES {rows}) AS limits(route, limit_s)"


@pytest.fixture
def limits(kept: Keep) -> None:
    """A grid of three limits."""
    kept("limits", query({"L3": 45.0, "L7": None, "R1": 12.5}), key=["route"])


@pytest.mark.usefixtures("limits")
def test_a_table_is_made_with_its_record(
    warehouse: Warehouse, pushed: Push, store: Path, folder: Path
) -> None:
    made = pushed("limits", "wh.limits")
    assert (made.is_new, made.outcome) == (True, Outcome(3))
    assert warehouse.rows("SELECT route, limit_s FROM limits") == [
        ("L3", 45.0),
        ("L7", None),
        ("R1", 12.5),
    ]
    document = json.loads(warehouse.record("limits"))
    assert document["grid"] == "limits"
    assert document["pushed"]["mode"] == "create"
    (folder / "record.json").write_text(json.dumps(document), encoding="utf-8")
    (verdict,) = verify(
        lambda place: Session(store=place, threads=1), read_record(folder / "record.json")
    )
    assert verdict.agrees
    actions = history(store, "limits").column("action").to_pylist()
    assert actions[:2] == ["pushed", "keep"]  # the push as one line
    assert unconfirmed_in(Store(store)) == []


@pytest.mark.usefixtures("limits")
def test_a_table_that_is_there_is_not_made_again(
    warehouse: Warehouse, pushed: Push, kept: Keep
) -> None:
    pushed("limits", "wh.limits")
    kept("limits", query({"L9": 1.0}), key=["route"])
    with pytest.raises(MidspreadError, match=r"wh\.limits is there already; choose --mode"):
        pushed("limits", "wh.limits")
    assert len(warehouse.rows("SELECT route FROM limits")) == 3


@pytest.mark.usefixtures("limits")
def test_append_and_merge_need_a_table_and_replace_makes_it(
    warehouse: Warehouse, pushed: Push
) -> None:
    for mode in ("append", "merge"):
        with pytest.raises(MidspreadError, match=f"there is no table wh.limits to {mode} to"):
            pushed("limits", "wh.limits", mode)
    assert pushed("limits", "wh.limits", "replace").is_new
    assert len(warehouse.rows("SELECT route FROM limits")) == 3


@pytest.mark.usefixtures("limits")
def test_merge_updates_by_key_inserts_and_leaves_others(
    warehouse: Warehouse, pushed: Push, kept: Keep
) -> None:
    pushed("limits", "wh.limits")
    kept("limits", query({"L3": 45.0, "L7": 30.0, "R2": 9.0}), key=["route"])
    made = pushed("limits", "wh.limits", "merge")
    assert made.outcome == Outcome(added=1, changed=1, left=2)
    assert warehouse.rows("SELECT route, limit_s FROM limits") == [
        ("L3", 45.0),
        ("L7", 30.0),
        ("R1", 12.5),
        ("R2", 9.0),
    ]
    assert json.loads(warehouse.record("limits"))["pushed"]["mode"] == "merge"


@pytest.mark.parametrize("seed", range(2))
@pytest.mark.parametrize("mode", ["replace", "append", "merge"])
def test_a_dry_run_foretells_and_writes_nothing(
    warehouse: Warehouse, pushed: Push, kept: Keep, mode: str, seed: int
) -> None:
    dice = random.Random(seed)
    routes = [*(f"R{i}" for i in range(12)), None]

    def some() -> Limits:
        return {
            route: dice.choice([None, 1.5, 2.0]) for route in routes if dice.random() < 0.6
        } or {"R0": 1.5}

    before, after = some(), some()
    kept("limits", query(before), key=["route"])
    pushed("limits", "wh.limits")
    kept("limits", query(after), key=["route"])
    there = warehouse.rows("SELECT route, limit_s FROM limits")
    foretold = pushed("limits", "wh.limits", mode, is_dry=True)
    assert warehouse.rows("SELECT route, limit_s FROM limits") == there
    new = after.keys() - before.keys()
    changed = {route for route in after.keys() & before.keys() if after[route] != before[route]}
    gone = before.keys() - after.keys()
    expected = {
        "append": Outcome(len(after), 0, len(before), 0),
        "merge": Outcome(len(new), len(changed), len(before) - len(changed), 0),
        "replace": Outcome(
            len(new), len(changed), len(before) - len(changed) - len(gone), len(gone)
        ),
    }[mode]
    assert foretold.outcome == expected
    assert pushed("limits", "wh.limits", mode).outcome == expected
    rows = {
        "append": [*before.items(), *after.items()],
        "merge": list({**before, **after}.items()),
        "replace": list(after.items()),
    }[mode]
    assert warehouse.rows("SELECT route, limit_s FROM limits") == sorted(rows, key=repr)


def test_a_key_of_several_columns_and_one_named_for_the_push(
    warehouse: Warehouse, pushed: Push, kept: Keep
) -> None:
    sql = "SELECT i % 3 AS route, i // 3 AS stop, i * {}::DOUBLE AS dwell_s FROM range(9) AS t(i)"
    kept("dwell", sql.format(1.0), key=["route", "stop"])
    pushed("dwell", "wh.dwell")
    kept("dwell", sql.format(2.0), key=["route", "stop"])
    assert pushed("dwell", "wh.dwell", "merge").outcome == Outcome(0, 8, 1)
    with pytest.raises(MidspreadError, match="3 rows of the grid have the key 2"):
        pushed("dwell", "wh.dwell", "merge", key=("route",))
    made = pushed("dwell", "wh.dwell", "merge", key=("STOP", "dwell_s"), is_dry=True)
    assert made.outcome == Outcome(0, 0, 9)
    assert warehouse.rows("SELECT sum(dwell_s) FROM dwell") == [(72.0,)]


def test_merging_without_a_key_or_by_one_that_is_there_twice(
    warehouse: Warehouse, pushed: Push, kept: Keep
) -> None:
    kept("limits", query({"L3": 45.0}), key=[])
    pushed("limits", "wh.limits")
    pushed("limits", "wh.limits", "append")
    with pytest.raises(MidspreadError, match="has no key to merge by"):
        pushed("limits", "wh.limits", "merge")
    with pytest.raises(MidspreadError, match=r"\(route\) are in wh.limits more than once"):
        pushed("limits", "wh.limits", "merge", key=("route",))
    assert warehouse.rows("SELECT route, limit_s FROM limits") == [("L3", 45.0)] * 2


@pytest.mark.usefixtures("limits")
@pytest.mark.parametrize("mode", ["append", "merge", "replace"])
def test_columns_that_differ_are_named_and_nothing_is_written(
    warehouse: Warehouse, pushed: Push, store: Path, mode: str
) -> None:
    warehouse.run("CREATE TABLE limits (route VARCHAR(20), share REAL)")
    warehouse.run("INSERT INTO limits VALUES ('L3', 0.5)")
    words = r"wh.limits has no limit_s; the grid has no share\)"
    with pytest.raises(MidspreadError, match=words):
        pushed("limits", "wh.limits", mode)
    assert warehouse.rows("SELECT route, share FROM limits") == [("L3", 0.5)]
    warehouse.run("CREATE TABLE typed (route VARCHAR(20), limit_s TEXT)")
    with pytest.raises(MidspreadError, match=r"\(limit_s is DOUBLE here and (?i:text|varchar)"):
        pushed("limits", "wh.typed", mode)
    assert unconfirmed_in(Store(store)) == []


@pytest.mark.usefixtures("limits")
def test_replacing_keeps_the_table_and_its_spelling(warehouse: Warehouse, pushed: Push) -> None:
    warehouse.run(
        'CREATE TABLE limits ("Limit_S" DOUBLE PRECISION, "Route" VARCHAR(20) PRIMARY KEY)'
    )
    warehouse.run("INSERT INTO limits VALUES (1.0, 'L3'), (2.0, 'gone')")
    assert pushed("limits", "wh.limits", "replace").outcome == Outcome(2, 1, 0, 1)
    assert warehouse.rows('SELECT "Route", "Limit_S" FROM limits')[0] == ("L3", 45.0)
    with pytest.raises(Exception, match=r"(?i)unique|duplicate"):
        warehouse.run("INSERT INTO limits VALUES (1.0, 'L3')")


@pytest.mark.usefixtures("limits")
def test_undo_takes_no_push_back(
    warehouse: Warehouse, pushed: Push, kept: Keep, store: Path
) -> None:
    kept("limits", query({"L3": 1.0}), key=["route"])
    pushed("limits", "wh.limits")
    with Store.open(store).writing() as engine:
        assert undo(engine, "limits") == ("limits", "keep")
    assert warehouse.rows("SELECT route, limit_s FROM limits") == [("L3", 1.0)]


def test_names_that_need_quotes(warehouse: Warehouse, pushed: Push, kept: Keep) -> None:
    kept("odd", 'SELECT \'a\' AS "select", 1.5::DOUBLE AS "dwell \'s"', key=["select"])
    pushed("odd", 'wh."dwell of Ös\'by"')
    assert pushed("odd", 'wh."dwell of Ös\'by"', "merge").outcome == Outcome(0, 0, 1)
    assert warehouse.rows('SELECT * FROM "dwell of Ös\'by"') == [("a", 1.5)]


def test_a_stale_grid_is_pushed_only_when_that_is_said(
    warehouse: Warehouse, pushed: Push, kept: Keep, folder: Path
) -> None:
    (folder / "visits.csv").write_text("dwell_s\n1.5\n", encoding="utf-8")
    kept("dwell", "SELECT sum(dwell_s) AS dwell_s FROM 'visits.csv'", key=[])
    (folder / "visits.csv").write_text("dwell_s\n1.5\n2.5\n", encoding="utf-8")
    with pytest.raises(MidspreadError, match=r"dwell is stale \(visits.csv has changed\)"):
        pushed("dwell", "wh.dwell")
    pushed("dwell", "wh.dwell", stale_ok=True)
    assert warehouse.rows("SELECT dwell_s FROM dwell") == [(1.5,)]
