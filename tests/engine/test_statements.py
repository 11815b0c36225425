"""Scripts split into statements."""

import duckdb
import pytest

from midspread.engine.errors import MidspreadError
from midspread.engine.statements import Kind, Statement, split, view_body


@pytest.fixture(scope="module")
def engine() -> duckdb.DuckDBPyConnection:
    return duckdb.connect()


def only(engine: duckdb.DuckDBPyConnection, sql: str) -> Statement:
    (statement,) = split(engine, sql)
    return statement


def test_semicolons_in_texts_names_and_comments_split_nothing(
    engine: duckdb.DuckDBPyConnection,
) -> None:
    script = """;; SELECT 'a;b', $tag$ ; $tag$ -- c; d
        , "e;f" /* ; /* nested ; */ ; */ FROM visits;
        FROM 'ö;.csv' ;"""
    first, second = split(engine, script)
    assert first.text.startswith("SELECT") and first.text.endswith("FROM visits")
    assert second.text == "FROM 'ö;.csv'"
    assert script[second.start :].startswith(second.text)


@pytest.mark.parametrize(
    "sql",
    [
        "SELECT 1",
        "FROM visits",
        "WITH a AS (SELECT 1) FROM a",
        "VALUES (1)",
        "TABLE visits",
        "(SELECT 1) UNION ALL SELECT 2",
        "DESCRIBE visits",
        "SUMMARIZE visits",
        "SHOW TABLES",
        "PIVOT visits ON day_part USING avg(dwell_s)",
        "PIVOT visits ON day_part IN ('peak') USING avg(dwell_s)",
        "UNPIVOT visits ON boardings, alightings INTO NAME what VALUE n",
        "FROM (PIVOT visits ON route)",
    ],
)
def test_queries(engine: duckdb.DuckDBPyConnection, sql: str) -> None:
    statement = only(engine, sql)
    assert statement.kind is Kind.QUERY
    assert statement.answers
    assert statement.body_text == sql


@pytest.mark.parametrize(
    ("sql", "body"),
    [
        ("EXPLAIN SELECT 1", "SELECT 1"),
        ("EXPLAIN ANALYZE (SELECT 1)", "(SELECT 1)"),
        ("EXPLAIN (ANALYZE, FORMAT json) SELECT 1", "SELECT 1"),
        ("EXPLAIN (SELECT 1)", "(SELECT 1)"),
        ("EXPLAIN PIVOT visits ON route", "PIVOT visits ON route"),
    ],
)
def test_what_is_explained(engine: duckdb.DuckDBPyConnection, sql: str, body: str) -> None:
    statement = only(engine, sql)
    assert (statement.kind, statement.body_text) == (Kind.EXPLAIN, body)


@pytest.mark.parametrize(
    ("sql", "kind", "name", "body"),
    [
        ("CREATE TEMP VIEW v AS FROM visits", Kind.VIEW, "v", "FROM visits"),
        (
            'CREATE OR REPLACE TEMPORARY VIEW "as" (a, "b c") AS SELECT 1, 2 AS x',
            Kind.VIEW,
            "as",
            "SELECT 1, 2 AS x",
        ),
        ("CREATE TEMP VIEW IF NOT EXISTS v AS TABLE visits", Kind.VIEW, "v", "TABLE visits"),
        ("CREATE TEMP MACRO m(a, b := 2) AS a + b", Kind.MACRO, "m", "a + b"),
        ("CREATE TEMP FUNCTION m(a DECIMAL(9, 2)) AS (a)", Kind.MACRO, "m", "(a)"),
        ("CREATE TEMP MACRO m(a) AS TABLE SELECT a", Kind.MACRO, "m", "SELECT a"),
        ("SET VARIABLE top = (SELECT 3)", Kind.VARIABLE, "top", "(SELECT 3)"),
    ],
)
def test_definitions(
    engine: duckdb.DuckDBPyConnection, sql: str, kind: Kind, name: str, body: str
) -> None:
    statement = only(engine, sql)
    assert (statement.kind, statement.name, statement.body_text) == (kind, name, body)
    assert statement.is_expression == (kind is not Kind.VIEW and "TABLE" not in sql)
    assert not statement.answers


@pytest.mark.parametrize(
    ("sql", "name"),
    [
        ("SET TimeZone = 'UTC'", "timezone"),
        ("SET SESSION threads TO 2", "threads"),
        ("SET TIME ZONE 'UTC'", "timezone"),
        ("RESET threads", "threads"),
        ("SET pivot_limit = -1", "pivot_limit"),
    ],
)
def test_settings(engine: duckdb.DuckDBPyConnection, sql: str, name: str) -> None:
    statement = only(engine, sql)
    assert (statement.kind, statement.name) == (Kind.SETTING, name)


@pytest.mark.parametrize(
    "sql",
    [
        "CREATE TABLE t AS SELECT 1",
        "CREATE TEMP TABLE t AS SELECT 1",
        "CREATE VIEW v AS SELECT 1",
        "CREATE SCHEMA s",
        "SET threads = (SELECT 2)",
        "DELETE FROM t",
        "COPY t TO 'x'",
        "BEGIN",
        "PRAGMA show_tables",
        "CHECKPOINT",
    ],
)
def test_everything_else_is_other(engine: duckdb.DuckDBPyConnection, sql: str) -> None:
    assert only(engine, sql).kind is Kind.OTHER


@pytest.mark.parametrize("sql", ["", " ;; ", "-- nothing\n", "/* nothing */"])
def test_a_script_without_statements(engine: duckdb.DuckDBPyConnection, sql: str) -> None:
    with pytest.raises(MidspreadError, match="holds no statement"):
        split(engine, sql)


def test_a_nul_character(engine: duckdb.DuckDBPyConnection) -> None:
    with pytest.raises(MidspreadError, match="NUL"):
        split(engine, "SELECT 1\x00; DROP TABLE t")


def test_statements_that_the_package_has_no_name_for(engine: duckdb.DuckDBPyConnection) -> None:
    with pytest.raises(MidspreadError, match="not supported"):
        split(engine, "UPDATE EXTENSIONS")


def test_the_query_of_a_view_as_the_catalogue_keeps_it(
    connection: duckdb.DuckDBPyConnection,
) -> None:
    sql = connection.execute("SELECT sql FROM duckdb_views() WHERE view_name = 'peak'").fetchall()
    assert view_body(sql[0][0]) == "SELECT * FROM visits WHERE (day_part = 'peak')"
