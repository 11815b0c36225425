"""What the commands of grids say: history, changes, versions, records, refusals."""

import re
from collections.abc import Callable
from pathlib import Path

import duckdb
import pytest
from click.testing import Result

Run = Callable[..., Result]

KEPT = (
    "SELECT route, avg(dwell_s) AS dwell_s, 0.5 AS se, count(*) AS n FROM 'visits.parquet'"
    " GROUP BY route"
)


def write_visits(rows: int, of_route: str = "L") -> None:
    duckdb.sql(
        f"COPY (SELECT '{of_route}' || i % 3 AS route, i::DOUBLE AS dwell_s FROM range({rows}) AS"
        " rows(i)) TO 'visits.parquet'"
    )


@pytest.fixture
def grids(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, run: Run) -> Path:
    """A folder with a grid of two versions, one remark, and a grid of limits."""
    monkeypatch.chdir(tmp_path)
    monkeypatch.delenv("MIDSPREAD_STORE", raising=False)
    write_visits(30)
    for arguments in (
        ("keep", "by_route", KEPT),
        ("column", "by_route", "remark TEXT"),
        ("enter", "by_route", "route=L1", "remark=clock replaced", "--note", "seen"),
        ("enter", "limits", "--columns", "route TEXT, limit_s DOUBLE", "--key", "route"),
        ("enter", "limits", "route=L1", "limit_s=45"),
        ("enter", "limits", "route=L2", "limit_s=NULL"),
        ("enter", "limits", "route=L2", "--delete"),
    ):
        done = run(*arguments)
        assert done.exit_code == 0, done.stderr
    write_visits(36)
    assert "version 2, 3 rows" in run("refresh").stdout
    return tmp_path


@pytest.mark.usefixtures("grids")
def test_the_history_in_words(run: Run) -> None:
    lines = run("history", "by_route").stdout.splitlines()
    assert lines[0].split() == ["moment", "what", "old", "new", "note"]
    told = [" ".join(line.split()[2:]) for line in lines[2:-1]]
    assert told == [
        "refresh: version 2, 3 rows visits.parquet has changed",
        "entered: remark of L1 NULL clock replaced seen",
        "column added: remark",
        "keep: version 1, 3 rows first kept",
    ]
    told = [" ".join(line.split()[2:]) for line in run("history", "limits").stdout.splitlines()]
    assert told[2:-1] == [
        "deleted: L2 route=L2, limit_s=NULL NULL",
        "entered: L2",
        "entered: limit_s of L1 NULL 45.0",
        "created",
    ]


@pytest.mark.usefixtures("grids")
def test_changes_with_few_digits_and_only_some_columns(run: Run) -> None:
    shown = run("changes", "by_route", "--columns", "dwell_s").stdout
    lines = [line.split() for line in shown.splitlines()]
    assert lines[2] == ["L0", "changed", "dwell_s", "13.5", "16.5", "3", "4.24264"]
    assert len(lines) == 6
    # A plain se belongs to the column of fractions before it, not to the count.
    counts = run("changes", "by_route", "--columns", "n").stdout.splitlines()[2].split()
    assert counts == ["L0", "changed", "n", "10", "12", "2", "NULL"]


@pytest.mark.usefixtures("grids")
def test_earlier_versions_and_how_many_are_kept(run: Run) -> None:
    shown = run("show", "by_route", "--version", "1").stdout
    assert re.search(r"by_route  version 1 of 2, 3 rows, made at \d\d:\d\d: first kept", shown)
    assert [line.split()[:2] for line in shown.splitlines()[-4:-1]] == [
        ["L0", "13.5"],
        ["L1", "14.5"],
        ["L2", "15.5"],
    ]
    refused = run("show", "by_route", "--version", "7")
    assert refused.exit_code == 1 and not refused.stdout
    said = run("store", "--keep-versions", "0").stdout
    assert said == "0 earlier versions of each grid will be kept; 1 older one let go.\n"
    assert "0 earlier ones of each grid are kept" in run("store").stdout
    assert "those kept are 2" in run("show", "by_route", "--version", "1").stderr
    assert "is sound" in run("store", "check").stdout


def test_check_tells_what_is_spare_and_what_is_not_ours(grids: Path, run: Run) -> None:
    with duckdb.connect(str(grids / "midspread.duckdb")) as opened:
        opened.execute("CREATE TABLE notes AS SELECT 1 AS n")
    said = run("store", "check").stdout.splitlines()
    assert said[0] == "The table notes was made by another program and is left alone."
    assert re.fullmatch(r"\d+ tables are kept for midspread undo; .*", said[1])
    assert "is sound: 2 grids with 4 rows and 0 kept answers read, " in said[2]
    assert run("store", "pack").exit_code == 0
    assert "kept for midspread undo" not in run("store", "check").stdout


@pytest.mark.usefixtures("grids")
def test_a_record_names_its_files(run: Run) -> None:
    shown = run("show", "by_route", "--record").stdout
    assert re.search(r"files: visits.parquet\n    .*visits.parquet, [\d,]+ bytes, of 20", shown)
    assert '\n    [["L1"], "remark", "clock replaced"]\n' in shown


@pytest.mark.parametrize(
    ("arguments", "code", "words"),
    [
        (("keep", "select", "SELECT 1 AS k"), 2, "select is a word of SQL"),
        (("enter", "left", "--columns", "k INTEGER", "--key", "k"), 2, "left is a word of SQL"),
        (("show", "--record"), 2, "name it first"),
        (("show", "limits", "--version", "3"), 1, "no versions; midspread history limits"),
        (("changes", "limits"), 1, "no versions; midspread history limits"),
        (("changes", "by_route", "--columns", "dwel"), 2, "did you mean dwell_s?"),
        (("refresh", "by_rout"), 1, "did you mean by_route?"),
        (("enter", "limits", "--from", "odd.csv"), 1, "line 3 has 1 values where the header"),
        (("store", "check", "--keep-versions", "3"), 2, "--keep-versions goes without check"),
        (("store", "--keep-versions", "-1"), 2, "whole number from 0 up"),
        (("changes", "by_route", "--memory", "much"), 2, "--memory must be an amount"),
    ],
)
def test_what_is_refused(
    grids: Path, run: Run, arguments: tuple[str, ...], code: int, words: str
) -> None:
    (grids / "odd.csv").write_text("route;limit_s\nL1;3\nL2\n", encoding="utf-8")
    refused = run(*arguments)
    assert (refused.exit_code, refused.stdout) == (code, "")
    assert words in refused.stderr and refused.stderr.count("\n") == 1
    assert run("query", "--format", "csv", "FROM limits").stdout == "route,limit_s\nL1,45.0\n"


def test_a_failed_grid_says_why_in_one_clause(grids: Path, run: Run) -> None:
    (grids / "visits.parquet").unlink()
    failed = run("refresh")
    assert failed.exit_code == 1
    reason = "there is no file visits.parquet; check the path"
    assert failed.stdout == f"by_route: failed, its last good contents stay: {reason}\n"
    assert f"failed: {reason}\n" in run("show").stdout
    run("keep", "later", "SELECT * FROM 'visits.parquet'", "--later")
    assert f"later: failed: {reason}\n" in run("refresh").stdout


def test_semicolons_between_the_values_of_a_file(grids: Path, run: Run) -> None:
    (grids / "more.csv").write_text("\ufeffroute;limit_s\nL5;3.5\n", encoding="utf-8")
    assert run("enter", "limits", "--from", "more.csv").stdout == (
        "limits: 1 cell changed, 1 new row\n"
    )
