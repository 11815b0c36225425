"""``midspread query``: where SQL comes from, where answers go."""

import csv
import io
import json
import math
from collections.abc import Callable
from pathlib import Path

import duckdb
import openpyxl
import pyarrow.parquet as pq
import pytest
from click.testing import Result

Run = Callable[..., Result]

BY_ROUTE = (
    "SELECT route, trimmed_mean(dwell_s, 0.1) AS typical FROM 'dwell/*.parquet' "
    "GROUP BY route ORDER BY route"
)


@pytest.fixture
def by_route(run: Run, here: Path) -> list[tuple[str, float]]:
    """The answer to BY_ROUTE by way of the machine format."""
    assert here == Path.cwd()
    rows = list(csv.reader(io.StringIO(run("query", BY_ROUTE).stdout)))
    assert rows[0] == ["route", "typical"]
    return [(route, float(typical)) for route, typical in rows[1:]]


def test_csv_in_a_pipe_with_every_digit(by_route: list[tuple[str, float]]) -> None:
    with duckdb.connect() as connection:
        values = connection.execute(
            "SELECT route, list(dwell_s ORDER BY dwell_s) FROM 'dwell/*.parquet' "
            "WHERE dwell_s IS NOT NULL GROUP BY route ORDER BY route"
        ).fetchall()
    expected = []
    for route, numbers in values:
        cut = int(0.1 * len(numbers))
        kept = numbers[cut : len(numbers) - cut]
        expected.append((route, math.fsum(kept) / len(kept)))
    assert [route for route, _ in by_route] == [route for route, _ in expected]
    for (_, shown), (_, computed) in zip(by_route, expected, strict=True):
        assert shown == pytest.approx(computed, rel=1e-14)


def test_every_format_says_the_same(run: Run, by_route: list[tuple[str, float]]) -> None:
    as_json = json.loads(run("query", BY_ROUTE, "--format", "json").stdout)
    assert [(row["route"], row["typical"]) for row in as_json] == by_route
    lines = run("query", BY_ROUTE, "--format", "ndjson").stdout.splitlines()
    assert [json.loads(line) for line in lines] == as_json
    markdown = run("query", BY_ROUTE, "--format", "markdown").stdout.splitlines()
    cells = [[cell.strip() for cell in line.strip("|").split("|")] for line in markdown[2:]]
    assert [(route, float(typical)) for route, typical in cells] == by_route
    table = run("query", BY_ROUTE, "--format", "table").stdout.splitlines()
    assert table[0].split() == ["route", "typical"]
    assert table[-1].strip() == "12 rows"
    for line, (route, typical) in zip(table[2:-1], by_route, strict=True):
        assert line.split()[0] == route
        assert float(line.split()[1]) == pytest.approx(typical, abs=5e-5)


def test_out_writes_each_kind_of_file(
    run: Run, here: Path, by_route: list[tuple[str, float]]
) -> None:
    for ending in ("csv", "parquet", "json", "xlsx"):
        answered = run("query", BY_ROUTE, "--out", f"typical.{ending}")
        assert answered.exit_code == 0
        assert answered.stdout == ""
        assert f"12 rows written to typical.{ending}" in answered.stderr
    rows = pq.read_table(here / "typical.parquet").to_pylist()
    assert [(row["route"], row["typical"]) for row in rows] == by_route
    assert json.loads((here / "typical.json").read_text()) == rows
    assert (here / "typical.csv").read_text() == run("query", BY_ROUTE).stdout
    sheet = openpyxl.load_workbook(here / "typical.xlsx").active
    assert sheet is not None
    for row, (route, typical) in zip(
        sheet.iter_rows(min_row=2, values_only=True), by_route, strict=True
    ):
        assert row == (route, pytest.approx(typical, rel=1e-15))  # a workbook's own precision


def test_out_refuses_a_file_that_exists_unless_told_to_replace(run: Run, here: Path) -> None:
    (here / "notes.csv").write_text("mine")
    refused = run("query", BY_ROUTE, "--out", "notes.csv")
    assert (refused.exit_code, refused.stdout) == (1, "")
    assert "notes.csv exists" in refused.stderr
    assert (here / "notes.csv").read_text() == "mine"
    assert run("query", BY_ROUTE, "--out", "notes.csv", "--replace").exit_code == 0
    assert (here / "notes.csv").read_text().startswith("route,typical\n")


@pytest.mark.usefixtures("here")
def test_out_is_checked_before_anything_runs(run: Run) -> None:
    assert run("query", "SELECT nonsense", "--out", "typical.pdf").exit_code == 2
    assert "typical.pdf" in run("query", "SELECT nonsense", "--out", "typical.pdf").stderr
    both = run("query", BY_ROUTE, "--out", "typical.csv", "--format", "json")
    assert both.exit_code == 2
    assert "leave --format out" in both.stderr


def test_a_file_and_standard_input(run: Run, here: Path, by_route: list[tuple[str, float]]) -> None:
    (here / "q.sql").write_text("\ufeff" + BY_ROUTE + ";\n", encoding="utf-8")
    assert len(by_route) == 12
    from_argument = run("query", BY_ROUTE).stdout
    assert run("query", "--file", "q.sql").stdout == from_argument
    assert run("query", "--file", "-", stdin=BY_ROUTE).stdout == from_argument


def test_a_script_that_cannot_be_read(run: Run, here: Path) -> None:
    missing = run("query", "--file", "missing.sql")
    assert missing.exit_code == 1
    assert "query: the file missing.sql cannot be read" in missing.stderr
    (here / "binary.sql").write_bytes(b"SELECT '\xff\xfe'")
    assert "is not text in UTF-8 (byte 9)" in run("query", "--file", "binary.sql").stderr


@pytest.mark.usefixtures("here")
def test_each_select_of_a_script_is_printed_in_turn(run: Run) -> None:
    script = "CREATE TEMP VIEW v AS SELECT 7 AS seven; SELECT 1 AS one; FROM v"
    shown = run("query", script, "--format", "table").stdout.split()
    assert shown == ["one", "───", "1", "1", "row", "seven", "─────", "7", "1", "row"]


@pytest.mark.usefixtures("here")
@pytest.mark.parametrize("options", [[], ["--format", "json"], ["--out", "both.csv"]])
def test_machine_formats_take_one_select(run: Run, options: list[str]) -> None:
    refused = run("query", "SELECT 1; SELECT 2", *options)
    assert (refused.exit_code, refused.stdout) == (2, "")
    assert "takes one SELECT, and there are more" in refused.stderr
    assert not Path("both.csv").exists()


@pytest.mark.usefixtures("here")
@pytest.mark.parametrize("form", ["table", "csv"])
def test_a_script_that_asks_nothing(run: Run, form: str) -> None:
    refused = run("query", "CREATE TEMP VIEW v AS SELECT 1", "--format", form)
    assert (refused.exit_code, refused.stdout) == (2, "")
    assert "end it with a SELECT" in refused.stderr


@pytest.mark.usefixtures("here")
def test_show_sql_shows_what_a_call_stands_for(run: Run) -> None:
    shown = run(
        "query",
        "--show-sql",
        "SELECT mad_scale(dwell_s) FILTER (WHERE boardings > 0) FROM 'dwell/*.parquet'",
    )
    assert shown.exit_code == 0
    assert "CASE WHEN" in shown.stdout


@pytest.mark.usefixtures("here")
def test_attached_databases_can_be_joined(run: Run) -> None:
    sql = "SELECT count(*) AS n FROM wh.routes JOIN 'dwell/*.parquet' USING (route)"
    assert run("query", "--attach", "wh=warehouse.duckdb", sql).stdout == "n\n20000\n"
    missing = run("query", "--attach", "wh=nowhere.duckdb", sql)
    assert missing.exit_code == 1
    assert "nowhere.duckdb" in missing.stderr


@pytest.mark.usefixtures("kept")
def test_asked_again_it_comes_from_the_store_and_says_so(run: Run) -> None:
    first = run("query", BY_ROUTE)
    again = run("query", BY_ROUTE.replace("SELECT", "select  ") + " -- again")
    assert "answered from the store" not in first.stderr
    assert "answered from the store" in again.stderr
    assert again.stdout == first.stdout
    assert "answered from the store" not in run("query", BY_ROUTE, "--recompute").stderr


def test_the_store_may_be_named(run: Run, kept: Path) -> None:
    named = kept.with_name("named.duckdb")
    run("query", BY_ROUTE, "--store", str(named))
    assert named.is_file()
    assert not kept.exists()


@pytest.mark.usefixtures("here")
def test_rows_of_a_table(run: Run) -> None:
    sql = "SELECT i FROM range(1000) t(i)"
    shown = run("query", sql, "--format", "table", "--rows", "8").stdout.split()
    assert shown[2:11] == ["0", "1", "2", "3", "4", "5", "⋮", "998", "999"]
    assert "992 rows in between not shown" in " ".join(shown)
    assert len(run("query", sql, "--format", "table", "--rows", "0").stdout.splitlines()) == 1003


@pytest.mark.usefixtures("here")
@pytest.mark.parametrize(
    ("sql", "code", "words"),
    [
        ("SELECT trimmed_mean(dwell_s, 0.7) FROM 'dwell/*.parquet'", 1, "got 0.7"),
        ("SELECT trimmed_mean(dwell_s, NULL) FROM 'dwell/*.parquet'", 1, "NULL"),
        ("SELECT trimmed_mean(route) FROM 'dwell/*.parquet'", 1, "trimmed_mean"),
        ("SELECT trimed_mean(dwell_s) FROM 'dwell/*.parquet'", 1, "trimmed_mean"),
        ("SELECT trimmed_mean(dwel_s) FROM 'dwell/*.parquet'", 1, "dwell_s"),
        ("SELECT trimmed_mean(dwell_s, share = 0.2) FROM 'dwell/*.parquet'", 1, "share := 0.2"),
        ("SELECT 1 FROM 'missing/*.parquet'", 1, "missing/*.parquet"),
        ("SELECT FROM WHERE", 1, "line 1"),
        ("DROP TABLE x", 1, ""),
        ("", 1, "query"),
    ],
)
def test_bad_queries_give_one_sentence(run: Run, sql: str, code: int, words: str) -> None:
    refused = run("query", sql)
    assert (refused.exit_code, refused.stdout) == (code, "")
    assert refused.stderr.count("\n") == 1
    assert words in refused.stderr
    assert "Traceback" not in refused.stderr
    assert "error of ours" not in refused.stderr
