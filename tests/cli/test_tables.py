"""Results laid out for a screen: every value is there, and no line is wider than the screen."""

import io
import re

import duckdb
import pyarrow as pa
import pytest
from rich.cells import cell_len
from rich.console import Console

from midspread.cli.tables import excerpt, laid_out, print_table
from midspread.cli.wrapping import header_lines, wrapped


def answer(sql: str) -> pa.Table:
    return duckdb.connect().sql(sql).to_arrow_table()


def lines(sql: str, width: int = 80, most_rows: int = 40) -> list[str]:
    return [line.plain for line in laid_out(excerpt(answer(sql), most_rows), width)]


def test_texts_to_the_left_and_numbers_to_the_right() -> None:
    sql = "SELECT * FROM (VALUES ('L1', 28731, 17.25::DOUBLE), ('L10', 5, NULL)) t(route, n, mean)"
    assert lines(sql) == [
        "route       n   mean",
        "─────  ──────  ─────",
        "L1     28,731  17.25",
        "L10         5   NULL",
    ]


def test_null_differs_from_the_text_null_and_from_the_empty_text() -> None:
    sql = "SELECT NULL::VARCHAR AS a, 'NULL' AS b, '' AS c, ' x' AS d"
    assert lines(sql)[-1] == "NULL  'NULL'     ' x'"


def test_nothing_reaches_the_terminal_that_it_would_obey() -> None:
    shown = "\n".join(lines("SELECT chr(27) || '[31mred' AS a, 'two' || chr(10) || 'lines' AS b"))
    assert "\x1b" not in shown
    assert "\\u001b[31mred" in shown
    assert "two\\nlines" in shown


def test_a_header_is_shown_without_obeying_it_either() -> None:
    table = pa.table({"bad\x1b[2J": [1]})
    assert "\x1b" not in "".join(line.plain for line in laid_out(excerpt(table), 80))


def test_a_record_takes_a_column_for_each_field() -> None:
    assert lines("SELECT {'lower': -3.5::DOUBLE, 'upper': 41.25::DOUBLE} AS fences") == [
        "fences.lower  fences.upper",
        "────────────  ────────────",
        "        -3.5         41.25",
    ]


def test_a_record_that_is_null_has_null_fields() -> None:
    sql = "SELECT * FROM (VALUES ({'a': 1}), (NULL)) t(r)"
    assert [line.strip() for line in lines(sql)[2:]] == ["1", "NULL"]


def test_a_list_of_records_is_a_small_table() -> None:
    sql = "SELECT 'x' AS k, [{'letter': 'M', 'depth': 20.5}, {'letter': 'F', 'depth': 10}] AS lv"
    assert lines(sql) == [
        "k  lv",
        "─  ─────────────",
        "x  letter  depth",
        "   M       20.5",
        "   F       10.0",
    ]


@pytest.mark.parametrize(
    ("sql", "shown"),
    [
        ("[1.5, NULL, 2]::DOUBLE[]", "[1.5, NULL, 2]"),
        ("true", "true"),
        ("DATE '2031-03-07'", "2031-03-07"),
        ("TIMESTAMP '2031-03-07 14:02:00'", "2031-03-07 14:02:00"),
        ("1234567.50::DECIMAL(12,2)", "1,234,567.50"),
        ("INTERVAL 3 DAY", "3 days"),
        ("'x'::ENUM('x', 'y')", "x"),
        ("MAP {'k': 1.5::DOUBLE}", "[k: 1.5]"),
        ("[[1, 2], [3]]", "[[1, 2], [3]]"),
        ("{'a': [{'b': 1}]}", "[{b: 1}]"),
        ("'4ac7a9e9-607c-4c8a-84f3-843f0191e3fd'::UUID", "4ac7a9e9-607c-4c8a-84f3-843f0191e3fd"),
        ("1::HUGEINT", "1"),
    ],
)
def test_one_value_of_each_type(sql: str, shown: str) -> None:
    assert lines(f"SELECT {sql} AS v")[-1].strip() == shown


def test_endless_values_are_cut_and_say_so() -> None:
    assert lines("SELECT range(1000) AS v", width=9999)[-1].endswith("98, 99, and 900 more]")
    shown = " ".join(lines("SELECT repeat('x', 5000) AS v")[2:])
    assert shown.count("x") == 2000
    assert "… (5,000 characters)" in " ".join(shown.split())


def test_a_long_table_keeps_its_ends_and_says_what_it_left_out() -> None:
    part = excerpt(answer("SELECT i FROM range(100) t(i)"))
    shown = [line.plain.strip() for line in laid_out(part, 80)]
    assert shown[2:32] == [str(i) for i in range(30)]
    assert shown[32] == "⋮"
    assert shown[33:] == [str(i) for i in range(90, 100)]
    assert part.note == "100 rows, 60 rows in between not shown"


def test_all_rows_on_request() -> None:
    assert len(lines("SELECT i FROM range(100) t(i)", most_rows=0)) == 102


def test_a_wide_row_is_turned_on_its_side() -> None:
    columns = ", ".join(f"{i} AS measured_{i}" for i in range(30))
    shown = lines(f"SELECT {columns}")
    assert shown[0].split() == ["measured_0", "0"]
    assert shown[29].split() == ["measured_29", "29"]


def test_wide_tables_are_cut_into_bands_that_repeat_the_key() -> None:
    columns = ", ".join(f"i * {k} + 0.5::DOUBLE AS column_{k}" for k in range(20))
    shown = lines(f"SELECT 'L' || i AS route, {columns} FROM range(30) t(i)", most_rows=0)
    heads = [line for line in shown if line.startswith("route")]
    assert len(heads) > 1
    assert [int(k) for line in heads for k in re.findall(r"\d+", line)] == list(range(20))
    assert sum(line.startswith("L29 ") for line in shown) == len(heads)


@pytest.mark.parametrize("width", [20, 40, 80, 120])
def test_no_line_is_wider_than_the_screen(width: int) -> None:
    columns = ", ".join(f"i * {k} AS figure_number_{k}" for k in range(12))
    sql = f"SELECT 'stop ' || i AS stop, repeat('wörter 漢字 ', i) AS words, {columns} "
    for line in lines(sql + "FROM range(12) t(i)", width=width):
        assert cell_len(line) <= width


def test_nothing_is_lost_when_texts_wrap() -> None:
    words = " ".join(f"word{i}" for i in range(60))
    shown = " ".join(lines(f"SELECT 1 AS n, '{words}' AS words", width=50)[2:])
    assert re.findall(r"word\d+", shown) == words.split()


def test_an_empty_result_shows_its_columns_and_no_rows() -> None:
    written = io.StringIO()
    console = Console(file=written, width=80)
    print_table(console, answer("SELECT 1 AS a, 'x' AS b WHERE false"))
    assert written.getvalue().split() == ["a", "b", "─", "─", "0", "rows"]


def test_wrapping_words_and_headers() -> None:
    assert wrapped("a few words here", 8) == ["a few", "words", "here"]
    assert wrapped("unbreakable", 4) == ["unbr", "eaka", "ble"]
    assert header_lines("trimmed_mean_10", 8) == ["trimmed_", "mean_10"]
    assert header_lines("n_null", 8) == ["n_null"]
