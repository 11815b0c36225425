"""``midspread push``: what it says, and what `show` and `store check` say of pushes cut off."""

from collections.abc import Callable
from pathlib import Path

import pytest
from click.testing import Result

from midspread.engine.pushing.intents import begin
from midspread.engine.pushing.target import Mode, Place
from midspread.engine.store.store import Store

Run = Callable[..., Result]


@pytest.fixture
def prepared(here: Path, run: Run) -> Path:
    """A demo folder with a grid of limits and the warehouse attached."""
    run("enter", "limits", "--columns", "route TEXT, limit_s DOUBLE", "--key", "route")
    for route, limit in (("L3", 45), ("L7", 30)):
        assert run("enter", "limits", f"route={route}", f"limit_s={limit}").exit_code == 0
    assert run("attach", "wh=warehouse.duckdb").exit_code == 0
    return here


@pytest.mark.usefixtures("prepared")
def test_a_push_says_what_it_does_and_is_joined_there(run: Run) -> None:
    said = run("push", "limits", "wh.limits", "--dry-run").stdout
    assert said == "limits would be pushed to wh.limits, a new table: 2 rows added\n"
    said = run("push", "limits", "wh.limits").stdout
    assert said == "limits pushed to wh.limits, a new table: 2 rows added\n"
    run("enter", "limits", "route=L3", "limit_s=50")
    said = run("push", "limits", "wh.limits", "--mode", "merge").stdout
    assert said == "limits pushed to wh.limits: 0 rows added, 1 changed, 1 left as they are\n"
    joined = "SELECT limit_s FROM wh.limits JOIN wh.routes USING (route) ORDER BY 1"
    assert run("query", "--format", "csv", joined).stdout == "limit_s\n30.0\n50.0\n"


@pytest.mark.usefixtures("prepared")
@pytest.mark.parametrize(
    ("arguments", "code", "words"),
    [
        (("limits", "wh.routes"), 1, "wh.routes is there already"),
        (("limits", "depot.limits"), 1, "no source is remembered as depot, there are wh"),
        (("limits", "wh.depot.limits"), 1, "wh has no schema depot"),
        (("limit", "wh.limits"), 1, "there is no grid limit; did you mean limits?"),
        (("limits", "limits"), 2, "NAME.TABLE or NAME.SCHEMA.TABLE"),
        (("limits", "wh.midspread_records"), 2, "choose another table"),
        (("limits", "wh.limits", "--key", "route"), 2, "--key goes with --mode merge"),
        (("limits", "wh.limits", "--mode", "update"), 2, "--mode"),
        (("limits", "wh.routes", "--mode", "merge"), 1, "the columns of wh.routes differ"),
    ],
)
def test_what_is_refused(run: Run, arguments: tuple[str, ...], code: int, words: str) -> None:
    refused = run("push", *arguments)
    assert refused.exit_code == code
    assert refused.stderr.startswith("midspread push: ")
    assert refused.stderr.count("\n") == 1
    assert words in refused.stderr


def test_a_push_that_was_cut_off_is_named_until_one_arrives(run: Run, prepared: Path) -> None:
    begin(
        Store.open(prepared / "midspread.duckdb"),
        "limits",
        Place("wh", None, "limits"),
        Mode.CREATE,
    )
    for arguments in (("show",), ("store", "check")):
        said = run(*arguments)
        assert said.exit_code == 0
        assert "The push of limits to wh.limits was begun at" in said.stdout
    assert run("push", "limits", "wh.limits").exit_code == 0
    assert "begun" not in run("show").stdout
