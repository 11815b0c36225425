"""Clocks, chance and the session's own state keep an answer out of the store."""

from pathlib import Path

import duckdb
import pytest

from midspread.engine.inputs.volatile import uses_volatile, why_volatile

Engine = duckdb.DuckDBPyConnection


@pytest.mark.parametrize(
    "sql",
    [
        "SELECT random()",
        "SELECT Random ()",
        "SELECT now()",
        "SELECT current_date",
        "SELECT * FROM t WHERE day < CURRENT_TIMESTAMP",
        "SELECT localtimestamp, 1",
        "SELECT today()",
        "SELECT get_current_timestamp()",
        "SELECT age(TIMESTAMP '2031-01-01')",
        "SELECT ago(INTERVAL 1 DAY)",
        "SELECT uuid()",
        "SELECT gen_random_uuid()",
        "SELECT nextval('s')",
        "SELECT getvariable('a')",
        "SELECT current_setting('threads')",
        "SELECT txid_current()",
        "SELECT * FROM 'stops.csv' USING SAMPLE 10",
        "SELECT * FROM 'stops.csv' TABLESAMPLE 10%",
        "SELECT * FROM (SELECT random() AS r)",
        "WITH q AS (SELECT (SELECT list_transform([1], x -> x + random()))) FROM q",
        "CREATE TEMP VIEW w AS SELECT now(); SELECT * FROM w",
        "FROM duckdb_tables()",
        "FROM duckdb_settings",
        "SELECT * FROM information_schema.tables",
        "SELECT * FROM pg_catalog.pg_tables",
        "FROM pragma_version()",
        "FROM sqlite_master",
        "SHOW TABLES",
        "EXPLAIN SELECT 1",
        "EXPLAIN ANALYZE SELECT 1",
        "DESCRIBE",
        "SET threads = 1; SELECT 1",
        "FROM test_all_types()",
        "FROM query('SELECT random()')",
        "SELECT * FROM v_now",
        "SELECT * FROM v_outer",
        "SELECT m_uuid()",
        "SELECT m_outer(1)",
    ],
)
def test_volatile(engine: Engine, sql: str) -> None:
    engine.execute("CREATE TEMP VIEW v_now AS SELECT current_date AS d")
    engine.execute("CREATE TEMP VIEW v_outer AS SELECT * FROM v_now")
    engine.execute("CREATE TEMP MACRO m_uuid() AS uuid()")
    engine.execute("CREATE TEMP MACRO m_outer(a) AS a || m_uuid()")
    assert uses_volatile(sql, engine)


@pytest.mark.parametrize(
    "sql",
    [
        "SELECT 1",
        "SELECT median(dwell_s), year(day), date_trunc('month', day) FROM 'a.csv' GROUP BY ALL",
        "SELECT random FROM t",
        "SELECT 'random()', \"now()\", t.current_date FROM t",
        "SELECT age(TIMESTAMP '2031-01-01', TIMESTAMP '2031-02-01')",
        "SELECT strftime(day, '%Y'), day + INTERVAL 1 DAY, datediff('day', a, b) FROM t",
        "FROM range(3), unnest([1]), generate_series(1, 2), repeat(1, 2)",
        "SELECT pg_typeof(1), typeof(2)",
        "SELECT list_sum([1]), geometric_mean(x), date_add(a, b) FROM t",
        "PIVOT t ON route USING sum(x)",
        "DESCRIBE t",
        "SUMMARIZE t",
        "VALUES (1)",
        "(SELECT 1)",
        "FROM t SELECT columns(*), tables, sample WHERE year = 1",
        "SELECT row_number() OVER (), lag(x) OVER (ORDER BY y) FROM t",
        "FROM histogram(t, x)",
        "FROM read_csv('a.csv')",
        "SELECT quantile_cont(x, 0.5), make_timestamptz(1), approx_count_distinct(x) FROM t",
        "",
    ],
)
def test_not_volatile(engine: Engine, sql: str) -> None:
    assert why_volatile([sql], engine) is None


def test_chance_in_a_macro_that_an_expression_calls() -> None:
    with duckdb.connect() as engine:
        engine.execute("CREATE TEMP MACRO noisy(x) AS sum(x + random())")
        engine.execute("CREATE TEMP MACRO plain(x) AS sum(x + 1)")
        for call in ("'t', '{}(x)'", "expression := '{}(x) + 1', tbl := 't'"):
            sql = "FROM bootstrap_expression(" + call + ", by := 'g')"
            assert uses_volatile(sql.format("noisy"), engine)
            assert not uses_volatile(sql.format("plain"), engine)


def test_every_volatile_function_of_the_engine_is_known(engine: Engine) -> None:
    """Whatever the engine itself calls volatile in all its forms is refused."""
    names = engine.execute(
        "SELECT function_name FROM duckdb_functions() WHERE stability IS NOT NULL"
        " AND function_name <> 'error' GROUP BY ALL HAVING bool_and(stability = 'VOLATILE')"
    ).fetchall()
    assert len(names) > 10
    for (name,) in names:
        assert uses_volatile(f"SELECT {name}()", engine), name


def test_views_in_an_attached_database(engine: Engine, tmp_path: Path) -> None:
    path = tmp_path / "warehouse.duckdb"
    with duckdb.connect(path) as other:
        other.execute("CREATE VIEW fresh AS SELECT now() AS t")
    engine.execute(f"ATTACH '{path}' AS wh (READ_ONLY)")
    assert uses_volatile("SELECT * FROM wh.fresh", engine)
    assert not uses_volatile("SELECT * FROM wh.stale", engine)
