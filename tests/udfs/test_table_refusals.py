"""What the table functions refuse, each in one sentence."""

import duckdb
import pytest

from tests.udfs.table_calls import ALL_CALLS, EVERY_TABLE, ROW_CALLS, complaint


@EVERY_TABLE
@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        ("NULL", "tbl must be the name of a table"),
        ("''", "tbl must be the name of a table"),
        ("3", "tbl must be the name of a table"),
        ("'visits', by := 3", "by must be a column name or a list of them, got 3"),
        ("'visits', by := [NULL]", "by must be a column name or a list of them, got [None]"),
        ("'visits', by := ['route', 'route']", "by names route twice"),
        ("'visits', by := ['route', 'ROUTE']", "by names ROUTE twice"),
    ],
)
def test_wrong_arguments(
    larkmoor: duckdb.DuckDBPyConnection, function: str, arguments: str, sentence: str
) -> None:
    table, _, more = arguments.partition(", ")
    call = ALL_CALLS[function].format(table, f", {more}" if more else "")
    said = complaint(larkmoor, f"FROM {call}")
    assert said.startswith(f"{function}: {sentence}")
    assert said.endswith(".")


@pytest.mark.parametrize(
    ("call", "sentence"),
    [
        ("robust_summary('visits', NULL)", "value must be the name of a column, got None"),
        ("robust_summary('visits', '')", "value must be the name of a column, got ''"),
        ("robust_summary('visits', 'dwell_s', deep := 'yes')", "deep must be true or false"),
        ("robust_summary('visits', 'dwell_s', deep := NULL)", "deep must be true or false"),
        ("robust_summary('visits', 'dwell_s', by := 'n')", "by names n, which is also a column"),
        (
            "robust_summary('(SELECT 1 AS qn_scale, 2 AS v)', 'v', by := 'qn_scale', deep := true)",
            "by names qn_scale, which is also a column",
        ),
        ("trim_path('visits', 'dwell_s', shares := 0.7)", "shares must be numbers from 0 to 0.5"),
        ("trim_path('visits', 'dwell_s', shares := [-0.1])", "shares must be numbers from 0"),
        ("trim_path('visits', 'dwell_s', shares := [])", "shares must be numbers from 0 to 0.5"),
        ("trim_path('visits', 'dwell_s', shares := NULL)", "shares must be numbers from 0 to 0.5"),
        ("trim_path('visits', 'dwell_s', shares := [0.1, NULL])", "shares must be numbers from"),
        ("trim_path('visits', 'dwell_s', shares := 'all')", "shares must be numbers from 0"),
        ("trim_path('visits', 'dwell_s', shares := [true])", "shares must be numbers from 0"),
        ("value_profile('visits', columns := 3)", "columns must be a column name or a list"),
        ("value_profile('visits', columns := ['day', 'DAY'])", "columns names DAY twice"),
        ("value_profile('visits', position := ['day'])", "position must be the name of a column"),
        ("value_profile('visits', by := 'column_name')", "by names column_name, which is also"),
        ("value_profile('(SELECT 1 AS route)', by := 'route')", "no column is left besides"),
        (
            "value_profile('(SELECT 1 AS a, 2 AS b)', by := 'a', position := 'b')",
            "no column is left besides the keys and the position",
        ),
    ],
)
def test_wrong_arguments_of_one_function(
    larkmoor: duckdb.DuckDBPyConnection, call: str, sentence: str
) -> None:
    function = call.split("(")[0]
    said = complaint(larkmoor, f"FROM {call}")
    assert said.startswith(f"{function}: {sentence}")
    assert said.endswith(".")


@pytest.mark.parametrize("function", ["robust_summary", "trim_path", "heaping", *ROW_CALLS])
@pytest.mark.parametrize(
    ("value", "kind"),
    [
        ("'a'", "VARCHAR"),
        ("true", "BOOLEAN"),
        ("DATE '2030-01-01'", "DATE"),
        ("TIME '10:00'", "TIME"),
        ("TIMESTAMP '2030-01-01'", "TIMESTAMP"),
        ("INTERVAL 1 DAY", "INTERVAL"),
        ("uuid()", "UUID"),
        ("[1]", "INTEGER[]"),
        ("{'a': 1}", "STRUCT(a INTEGER)"),
        ("MAP {1: 2}", "MAP(INTEGER, INTEGER)"),
    ],
)
def test_columns_that_are_no_numbers(
    larkmoor: duckdb.DuckDBPyConnection, function: str, value: str, kind: str
) -> None:
    larkmoor.execute(f"CREATE OR REPLACE TEMP TABLE odd AS SELECT {value} AS payment, 1 AS visit")
    more = ", 'visit'" if function == "rolling_flags" else ""
    said = complaint(larkmoor, f"FROM {function}('odd', 'payment'{more})")
    assert said.startswith(f"{function}: payment must be a number")
    assert f", not {kind};" in said


@EVERY_TABLE
@pytest.mark.parametrize(
    ("arguments", "named"),
    [
        ("'nowhere'", "nowhere"),
        ("'nowhere.parquet'", "nowhere.parquet"),
        ("'nowhere-*.parquet'", "nowhere-*.parquet"),
        ("'visits', by := 'depot'", '"depot"'),
        ("'(SELECT true AS ramp_used, 1 AS visit)'", '"dwell_s"'),
    ],
)
def test_what_is_missing_is_named(
    larkmoor: duckdb.DuckDBPyConnection, function: str, arguments: str, named: str
) -> None:
    table, _, more = arguments.partition(", ")
    call = ALL_CALLS[function].format(table, f", {more}" if more else "")
    assert named in complaint(larkmoor, f"FROM {call}")


@EVERY_TABLE
@pytest.mark.parametrize(
    "table",
    [
        "(FROM visits); DROP TABLE visits",
        "(FROM visits",
        "visits; DROP TABLE visits",
        '"visits"; DROP TABLE visits',
        "(DELETE FROM visits RETURNING *)",
    ],
)
def test_a_table_cannot_smuggle_in_a_statement(
    larkmoor: duckdb.DuckDBPyConnection, function: str, table: str
) -> None:
    complaint(larkmoor, "FROM " + ALL_CALLS[function].format(f"'{table}'", ""))
    assert larkmoor.execute("SELECT count(*) FROM visits").fetchall() == [(200,)]
