"""Results as files: right in every format, complete or not there."""

import datetime as dt
import json
import math
import os
import subprocess
import sys
import zipfile
from decimal import Decimal
from pathlib import Path

import duckdb
import openpyxl
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from midspread.engine import exporting, workbooks
from midspread.engine.errors import MidspreadError, UsageError
from midspread.engine.exporting import check_target, write_file

ENDINGS = (".csv", ".json", ".ndjson", ".parquet", ".xlsx")
TABLE = pa.table({"route": ["12", None, "é"], "dwell_s": [0.1, 1e300, None], "n": [1, 2, 3]})


@pytest.mark.parametrize("ending", ENDINGS)
def test_every_format_is_read_by_others(tmp_path: Path, ending: str) -> None:
    path = tmp_path / f"answer{ending}"
    write_file(TABLE, path, replace=False)
    assert [p.name for p in tmp_path.iterdir()] == [path.name]
    rows = [("12", 0.1, 1), (None, 1e300, 2), ("é", None, 3)]
    if ending == ".xlsx":
        sheet = openpyxl.load_workbook(path).active
        assert sheet is not None
        read = list(sheet.values)
        assert read == [("route", "dwell_s", "n"), *rows]
    elif ending == ".csv":
        sql = "SELECT route, dwell_s, n FROM read_csv($1, types = {'route': 'VARCHAR'})"
        assert duckdb.execute(sql, [str(path)]).fetchall() == rows
    else:
        assert duckdb.execute(f"SELECT route, dwell_s, n FROM '{path}'").fetchall() == rows


@pytest.mark.parametrize("name", ["answer", "answer.txt", "answer.xls", ".csv", "answer.csv.gz"])
def test_an_ending_that_names_no_format(tmp_path: Path, name: str) -> None:
    with pytest.raises(UsageError, match=r"\.csv, \.json, \.ndjson, \.parquet or \.xlsx"):
        write_file(TABLE, tmp_path / name, replace=True)
    assert list(tmp_path.iterdir()) == []


def test_the_ending_may_be_in_capitals(tmp_path: Path) -> None:
    write_file(TABLE, tmp_path / "ANSWER.JSON", replace=False)
    assert json.loads((tmp_path / "ANSWER.JSON").read_text())[0]["n"] == 1


def test_an_existing_file_is_left_unless_asked(tmp_path: Path) -> None:
    path = tmp_path / "a.csv"
    path.write_text("mine")
    path.chmod(0o640)
    with pytest.raises(MidspreadError, match="add --replace"):
        write_file(TABLE, path, replace=False)
    with pytest.raises(MidspreadError, match="add --replace"):
        check_target(path, replace=False)
    assert path.read_text() == "mine"
    write_file(TABLE, path, replace=True)
    assert path.read_text().startswith("route,dwell_s,n\n")
    assert path.stat().st_mode & 0o777 == 0o640


def test_a_file_that_comes_into_being_meanwhile_is_left(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "a.csv"
    real = exporting.publish

    def late(fresh: Path, target: Path) -> None:
        target.write_text("theirs")
        real(fresh, target)

    monkeypatch.setattr(exporting, "publish", late)
    with pytest.raises(MidspreadError, match="meanwhile"):
        write_file(TABLE, path, replace=False)
    assert path.read_text() == "theirs"
    assert [p.name for p in tmp_path.iterdir()] == ["a.csv"]


def test_a_link_is_written_through(tmp_path: Path) -> None:
    (tmp_path / "real.csv").write_text("old")
    (tmp_path / "link.csv").symlink_to("real.csv")
    write_file(TABLE, tmp_path / "link.csv", replace=True)
    assert (tmp_path / "link.csv").is_symlink()
    assert (tmp_path / "real.csv").read_text() != "old"


def test_targets_that_are_no_files(tmp_path: Path) -> None:
    (tmp_path / "d.csv").mkdir()
    with pytest.raises(MidspreadError, match="is a folder"):
        write_file(TABLE, tmp_path / "d.csv", replace=True)
    with pytest.raises(MidspreadError, match="does not exist"):
        write_file(TABLE, tmp_path / "no" / "a.csv", replace=False)
    os.mkfifo(tmp_path / "p.csv")
    with pytest.raises(MidspreadError, match="no ordinary file"):
        write_file(TABLE, tmp_path / "p.csv", replace=True)


FULL = """
import resource, signal, sys
from pathlib import Path
import pyarrow as pa
from midspread.engine.errors import MidspreadError
from midspread.engine.exporting import write_file
signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
resource.setrlimit(resource.RLIMIT_FSIZE, (1000, 1000))
table = pa.table({"x": [i * 1.37 for i in range(20_000)]})
try:
    write_file(table, Path(sys.argv[1]), replace=True)
except MidspreadError as error:
    print(error)
"""


@pytest.mark.parametrize("ending", ENDINGS)
def test_a_full_disk_leaves_the_old_file(tmp_path: Path, ending: str) -> None:
    """A limit on the size of files stands for the full disk: the writes fail alike."""
    path = tmp_path / f"a{ending}"
    path.write_text("old")
    result = subprocess.run(
        [sys.executable, "-c", FULL, str(path)], capture_output=True, text=True, check=True
    )
    assert "could not be written (File too large); nothing was changed" in result.stdout
    assert len(result.stdout.splitlines()) == 1
    assert result.stderr == ""
    assert path.read_text() == "old"
    assert [p.name for p in tmp_path.iterdir()] == [path.name]


def test_any_failure_leaves_the_old_file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "a.csv"
    path.write_text("old")

    def fail(*_: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setitem(exporting._WRITERS, ".csv", fail)
    with pytest.raises(KeyboardInterrupt):
        write_file(TABLE, path, replace=True)
    assert path.read_text() == "old"
    assert [p.name for p in tmp_path.iterdir()] == ["a.csv"]


PARQUET_QUERY = """
SELECT 1.10::DECIMAL(20, 2) AS d, TIMESTAMPTZ '2031-01-01' AS tz, TIMESTAMP_NS '2031-01-01' AS ns,
    [1, NULL] AS l, {'a': {'b': 'x'}} AS s, MAP {'k': 1.5} AS m, 'a'::ENUM('b', 'a') AS e,
    'nan'::DOUBLE AS f, INTERVAL 1 DAY AS i, [INTERVAL 1 DAY] AS li, union_value(num := 1) AS u,
    NULL AS z, '\\x01'::BLOB AS b, DATE '2031-01-01' AS day, true AS t, TIME '01:02:03' AS c,
    1 AS x, 2 AS x
"""


def test_parquet_keeps_types(tmp_path: Path) -> None:
    table = duckdb.sql(PARQUET_QUERY).to_arrow_table()
    write_file(table, tmp_path / "a.parquet", replace=False)
    read = pq.read_table(tmp_path / "a.parquet")
    assert read.column_names[-2:] == ["x", "x_2"]
    for name in ("d", "ns", "l", "s", "m", "b", "day", "t", "c", "x"):
        kept = table.column(table.column_names.index(name))
        assert read.column(name).to_pylist() == kept.to_pylist()
    assert read.schema.field("d").type == pa.decimal128(20, 2)
    assert math.isnan(read.column("f")[0].as_py())
    assert read.column("e").to_pylist() == ["a"]
    assert [read.column(n)[0].as_py() for n in ("i", "li", "u")] == ["1 days", '["1 days"]', "1"]


def sheet_of(tmp_path: Path, table: pa.Table) -> list[tuple[object, ...]]:
    write_file(table, tmp_path / "a.xlsx", replace=True)
    sheet = openpyxl.load_workbook(tmp_path / "a.xlsx").active
    assert sheet is not None
    return [tuple(row) for row in sheet.values]


def test_a_workbook_takes_text_as_text(tmp_path: Path) -> None:
    texts = [
        "=1+1",
        "+1",
        "-1",
        "@SUM(A1)",
        "#N/A",
        "1",
        "TRUE",
        "2031-01-01",
        " x ",
        "a\nb",
        "\x01",
    ]
    table = pa.table({"=HYPERLINK(1)": texts})
    rows = sheet_of(tmp_path, table)
    assert [row[0] for row in rows] == ["=HYPERLINK(1)", *texts[:-1], "\ufffd"]
    with zipfile.ZipFile(tmp_path / "a.xlsx") as archive:
        sheet = archive.read("xl/worksheets/sheet1.xml").decode()
    assert "<f>" not in sheet
    assert 't="e"' not in sheet


def test_a_workbook_takes_what_it_can_hold_exactly(tmp_path: Path) -> None:
    table = pa.table(
        {
            "i": [1, -(10**15) + 1, 2**53 + 1, None],
            "f": [0.1, math.nan, -math.inf, 5e-324],
            "d": pa.array([Decimal("1.10"), Decimal("-1234567890123456.5"), None, Decimal(0)]),
            "b": [True, False, None, True],
            "day": [dt.date(2031, 1, 2), dt.date(1900, 2, 28), None, dt.date(1900, 3, 1)],
            "t": [
                dt.datetime(2031, 1, 2, 3, 4, 5),
                dt.datetime(2031, 1, 1, 0, 0, 0, 1),
                None,
                None,
            ],
            "c": [dt.time(1, 2, 3), dt.time(1, 2, 3, 4), None, None],
            "l": [[1], [], None, [2]],
        }
    )
    rows = sheet_of(tmp_path, table)[1:]
    assert [row[0] for row in rows] == [1, -(10**15) + 1, str(2**53 + 1), None]
    assert [row[1] for row in rows] == [0.1, "NaN", "-Infinity", 5e-324]
    assert [row[2] for row in rows] == [1.1, "-1234567890123456.50", None, 0]
    assert [row[3] for row in rows] == [True, False, None, True]
    assert [row[4] for row in rows] == [
        dt.datetime(2031, 1, 2),
        "1900-02-28",
        None,
        dt.datetime(1900, 3, 1),
    ]
    assert [row[5] for row in rows][:2] == [
        dt.datetime(2031, 1, 2, 3, 4, 5),
        "2031-01-01 00:00:00.000001",
    ]
    assert [row[6] for row in rows][:2] == [dt.time(1, 2, 3), "01:02:03.000004"]
    assert [row[7] for row in rows] == ["[1]", "[]", None, "[2]"]


def test_a_workbook_writes_times_with_a_zone_as_text(tmp_path: Path) -> None:
    table = pa.table({"t": pa.array([0], pa.timestamp("us", "Europe/Paris"))})
    assert sheet_of(tmp_path, table)[1] == ("1970-01-01 01:00:00+01:00",)


def test_what_a_workbook_cannot_take(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    with pytest.raises(MidspreadError, match="32,767"):
        sheet_of(tmp_path, pa.table({"t": ["x" * 32_768]}))
    too_wide = pa.table({f"c{i}": [1] for i in range(16_385)})
    with pytest.raises(MidspreadError, match="16,385 columns"):
        sheet_of(tmp_path, too_wide)
    too_long = pa.table({"x": pa.nulls(1_048_576)})
    with pytest.raises(MidspreadError, match=r"1,048,576 rows do not fit .* takes 1,048,575"):
        sheet_of(tmp_path, too_long)
    monkeypatch.setattr(workbooks, "MOST_ROWS", 4)
    assert len(sheet_of(tmp_path, pa.table({"x": [1, 2, 3]}))) == 4
    with pytest.raises(MidspreadError, match="instead"):
        sheet_of(tmp_path, pa.table({"x": [1, 2, 3, 4]}))
    assert [p.name for p in tmp_path.iterdir()] == ["a.xlsx"]
