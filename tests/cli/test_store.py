"""``midspread store``: what it says and what it does to kept answers."""

from collections.abc import Callable
from pathlib import Path

import pytest
from click.testing import Result

Run = Callable[..., Result]

SQL = "SELECT median(dwell_s) AS m FROM 'dwell/*.parquet'"


def facts(result: Result) -> dict[str, str]:
    assert result.exit_code == 0, result.stderr
    pairs = [line.strip().split(maxsplit=1) for line in result.stdout.splitlines()]
    return {pair[0]: pair[1] for pair in pairs if len(pair) == 2}


def test_a_store_that_is_not_there_yet(run: Run, kept: Path) -> None:
    answered = run("store")
    assert answered.exit_code == 0
    assert str(kept) in answered.stdout
    assert "not there yet" in answered.stdout
    assert not kept.exists()
    for action in ("check", "pack", "clear-answers"):
        refused = run("store", action)
        assert refused.exit_code == 1
        assert "There is no store" in refused.stderr


def test_what_it_holds(run: Run, kept: Path) -> None:
    run("query", SQL)
    shown = facts(run("store"))
    assert shown["place"] == str(kept)
    assert shown["answers"] == "1 kept answer"
    assert shown["room"].endswith("of at most 1.07 GB")
    assert "is sound: 0 grids with 0 rows and 1 kept answer read, " in run("store", "check").stdout


@pytest.mark.usefixtures("kept")
def test_the_answers_can_be_dropped_and_the_room_given_back(run: Run) -> None:
    run("query", SQL)
    assert "answered from the store" in run("query", SQL).stderr
    assert "1 kept answer dropped" in run("store", "clear-answers").stdout
    assert facts(run("store"))["answers"] == "0 kept answers"
    assert "given back" in run("store", "pack").stdout
    assert "answered from the store" not in run("query", SQL).stderr


def test_some_other_file_is_refused_and_left_alone(run: Run, here: Path) -> None:
    (here / "notes.txt").write_text("mine and nobody else's")
    for action in ([], ["check"], ["pack"], ["clear-answers"]):
        refused = run("store", *action, "--store", "notes.txt")
        assert refused.exit_code == 1
        assert "notes.txt" in refused.stderr
        assert refused.stderr.count("\n") == 1
    assert run("store", "clear-answers", "--store", "warehouse.duckdb").exit_code == 1
    assert (here / "notes.txt").read_text() == "mine and nobody else's"


def test_a_damaged_store_is_said_to_be_so(run: Run, kept: Path) -> None:
    run("query", SQL)
    content = bytearray(kept.read_bytes())
    content[4096 : len(content) // 2] = b"\0" * (len(content) // 2 - 4096)
    kept.write_bytes(content)
    refused = run("store", "check")
    assert refused.exit_code == 1
    assert str(kept) in refused.stderr
    assert kept.read_bytes() == bytes(content)
