"""``midspread show``: what there is, and what files and tables hold."""

from collections.abc import Callable
from pathlib import Path

import pytest
from click.testing import Result

Run = Callable[..., Result]


@pytest.mark.usefixtures("here")
def test_a_pattern_shows_columns_types_and_first_rows(run: Run) -> None:
    shown = run("show", "dwell/*.parquet").stdout
    assert shown.splitlines()[0].split() == ["dwell/*.parquet", "20,000", "rows"]
    lines = [line.split() for line in shown.splitlines()]
    for column, kind in [("day", "DATE"), ("route", "VARCHAR"), ("dwell_s", "DOUBLE")]:
        assert [column, kind] in lines
    assert ["12", "columns"] in lines
    assert "the first 10 rows" in shown
    assert "2031-01-01" in shown


@pytest.mark.usefixtures("here")
def test_a_database_lists_its_tables(run: Run) -> None:
    shown = [line.split() for line in run("show", "warehouse.duckdb").stdout.splitlines()]
    assert ["main", "routes", "table", "5", "12"] in shown
    assert ["main", "vehicles", "table", "7", "120"] in shown


@pytest.mark.usefixtures("here")
def test_a_table_of_an_attached_database(run: Run) -> None:
    shown = run("show", "--attach", "wh=warehouse.duckdb", "wh.routes").stdout
    assert shown.splitlines()[0].split() == ["wh.routes", "12", "rows"]
    assert "Fell Road" in shown


def test_names_with_blanks_and_quotes(run: Run, here: Path) -> None:
    odd = here / 'dwell of "Ös\'by".csv'
    odd.write_text('"dwell s",stop\n17.5,a\n', encoding="utf-8")
    answered = run("show", odd.name)
    assert answered.exit_code == 0, answered.stderr
    assert ["dwell", "s", "DOUBLE"] in [line.split() for line in answered.stdout.splitlines()]
    assert "17.5" in answered.stdout


def test_files_are_only_read_and_no_store_is_made(run: Run, here: Path) -> None:
    before = {path: path.stat().st_mtime_ns for path in sorted(here.rglob("*"))}
    run("show", "dwell/*.parquet")
    run("show", "warehouse.duckdb")
    run("show")
    assert {path: path.stat().st_mtime_ns for path in sorted(here.rglob("*"))} == before


@pytest.mark.usefixtures("here")
def test_nothing_named_shows_the_store_and_the_sources(run: Run) -> None:
    shown = run("show", "--attach", "wh=warehouse.duckdb", "--attach", "x=gone.duckdb").stdout
    assert "midspread.duckdb" in shown
    assert "not there yet" in shown
    assert "wh  warehouse.duckdb," in shown
    assert "x  gone.duckdb, missing" in shown


@pytest.mark.usefixtures("here")
@pytest.mark.parametrize("name", ["missing.parquet", "missing/*.csv", "nobody", "wh.routes"])
def test_what_is_not_there(run: Run, name: str) -> None:
    refused = run("show", name)
    assert (refused.exit_code, refused.stdout) == (1, "")
    assert refused.stderr.startswith("midspread show: ")
    assert refused.stderr.count("\n") == 1
    assert "(line" not in refused.stderr


@pytest.mark.usefixtures("here")
def test_a_pattern_that_the_shell_spread_out(run: Run) -> None:
    files = sorted(str(path) for path in Path("dwell").iterdir())
    refused = run("show", *files)
    assert refused.exit_code == 2
    assert "in quotes" in refused.stderr
