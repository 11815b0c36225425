"""``midspread attach``: a database remembered by name, and what `show` says of it."""

from collections.abc import Callable
from pathlib import Path

import pytest
from click.testing import Result

Run = Callable[..., Result]


@pytest.mark.usefixtures("here")
def test_a_source_is_remembered_shown_and_read(run: Run) -> None:
    assert run("attach", "wh=warehouse.duckdb").stdout == "wh: warehouse.duckdb, DuckDB\n"
    again = run("attach", "wh=warehouse.duckdb").stdout
    assert again == "wh: warehouse.duckdb, DuckDB, as before\n"
    assert (
        run("query", "--format", "csv", "SELECT count(*) AS n FROM wh.routes").stdout == "n\n12\n"
    )
    assert "wh  warehouse.duckdb, DuckDB, " in run("show").stdout
    assert "Fell Road" in run("show", "wh.routes").stdout


def test_a_source_that_moved_is_pointed_to_once(run: Run, here: Path) -> None:
    run("attach", "wh=warehouse.duckdb")
    (here / "new").mkdir()
    (here / "warehouse.duckdb").rename(here / "new" / "path.duckdb")
    for arguments in (("query", "FROM wh.routes"), ("show", "wh.routes")):
        refused = run(*arguments)
        assert refused.exit_code == 1
        assert refused.stderr.count("\n") == 1
        assert "midspread attach wh=PATH" in refused.stderr
    assert "missing" in run("show").stdout
    moved = run("attach", "wh=new/path.duckdb").stdout
    assert moved == "wh: from warehouse.duckdb to new/path.duckdb, DuckDB\n"
    assert run("query", "FROM wh.routes").exit_code == 0
    assert run("attach", "wh", "--remove").stdout.startswith("wh: forgotten; new/path.duckdb is")
    assert (here / "new" / "path.duckdb").is_file()


@pytest.mark.usefixtures("here")
@pytest.mark.parametrize("arguments", [("wh",), ("=a",), ("wh=",), ("wh=a", "--remove")])
def test_half_of_what_it_takes(run: Run, arguments: tuple[str, ...]) -> None:
    refused = run("attach", *arguments)
    assert refused.exit_code == 2
    assert refused.stderr.startswith("midspread attach: ")


def test_a_record_over_a_source_is_verified(run: Run, here: Path) -> None:
    run("attach", "wh=warehouse.duckdb")
    assert run("keep", "ends", "SELECT max(route) AS last FROM wh.routes").exit_code == 0
    (here / "ends.json").write_text(run("show", "ends", "--record", "--format", "json").stdout)
    verified = run("verify", "ends.json")
    assert verified.stdout == "ends: agrees to the last digit\n", verified.stderr
