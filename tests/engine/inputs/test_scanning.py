"""What SQL mentions: paths where the engine would read files, names, computed paths."""

import pytest

from midspread.engine.inputs.scanning import mentions_of

OURS = frozenset({"robust_summary", "trim_path"})


@pytest.mark.parametrize(
    ("sql", "paths"),
    [
        ("FROM 'dwell/*.parquet'", {"dwell/*.parquet"}),
        ('SELECT * FROM "dwell/01.csv" d', {"dwell/01.csv"}),
        ("SELECT * FROM dwell.csv", {"dwell.csv"}),
        ("SELECT * FROM stops", set()),
        (
            "SELECT * FROM 'a.csv' x JOIN 'b.csv' y USING (stop), 'c.csv'",
            {"a.csv", "b.csv", "c.csv"},
        ),
        ("FROM read_parquet(['a/*.parquet', 'b.parquet'])", {"a/*.parquet", "b.parquet"}),
        ("FROM read_csv('a.csv', delim = '*', quote := '?')", {"a.csv"}),
        ("FROM read_csv(('a.csv'))", {"a.csv"}),
        ("FROM d: 'a.csv'", {"a.csv"}),
        ("FROM ('a.csv' JOIN 'b.csv' ON true)", {"a.csv", "b.csv"}),
        ("SELECT (SELECT max(x) FROM 'a.csv'), exists(FROM 'b.csv')", {"a.csv", "b.csv"}),
        ("WITH q AS (FROM 'a.csv') SELECT * FROM q UNION ALL FROM 'b.csv'", {"a.csv", "b.csv"}),
        ("SELECT 'no.csv', x IN ('no2.csv') FROM t WHERE y = 'no3.csv' ORDER BY 'no4.csv'", set()),
        ("SELECT extract(year FROM 'no*'), trim(BOTH 'a' FROM 'no*')", set()),
        ("SELECT x IS DISTINCT FROM 'no*' FROM t", set()),
        ("SELECT a FROM t ORDER BY a DESC, 'no.csv'", set()),
        ("PIVOT 'a.csv' ON route USING sum(dwell_s)", {"a.csv"}),
        ("SUMMARIZE 'a.csv'", {"a.csv"}),
        ("DESCRIBE 'a.csv'", {"a.csv"}),
        ("CREATE TEMP VIEW v AS SELECT * FROM 'a.csv'", {"a.csv"}),
        ("FROM robust_summary('dwell/*.parquet', 'dwell_s', by := ['route'])", {"dwell/*.parquet"}),
        ("FROM robust_summary(value := 'dwell_s', tbl := 'a.csv')", {"a.csv"}),
        ("FROM trim_path('(SELECT * FROM ''a.csv'' WHERE x > 1)', 'x')", {"a.csv"}),
        ("FROM query('FROM read_csv([''a.csv''])')", {"a.csv"}),
        ("FROM query_table(['a.csv', 'b.csv'])", {"a.csv", "b.csv"}),
    ],
)
def test_paths(sql: str, paths: set[str]) -> None:
    found = mentions_of(sql, OURS)
    assert not found.computed
    assert {path for path in found.paths if path.endswith((".csv", ".parquet"))} == paths
    assert not any("*" in path for path in found.paths - paths)


@pytest.mark.parametrize(
    "sql",
    [
        "FROM read_csv('a' || '.csv')",
        "FROM read_csv('a'\n'.csv')",
        "FROM read_parquet(getvariable('files'))",
        "FROM read_parquet(list_transform(['a'], x -> x || '.parquet'))",
        "FROM read_parquet(files)",
        "FROM robust_summary('dwell/' || '*.parquet', 'dwell_s')",
        "FROM robust_summary(tbl := concat('a', '.csv'), value := 'x')",
        "FROM query('FROM ' || 'a.csv')",
        "FROM query_table($1)",
        "FROM e'a\\x2ecsv'",
        "FROM trim_path('(FROM read_csv(concat(''a'', ''.csv'')))', 'x')",
    ],
)
def test_a_path_put_together_by_an_expression_is_noticed(sql: str) -> None:
    assert mentions_of(sql, OURS).computed


def test_a_macro_may_hand_its_parameter_on() -> None:
    found = mentions_of("CREATE TEMP MACRO visits(p) AS TABLE FROM read_parquet(p)", OURS)
    assert not found.computed
    assert found.created == {"visits"}
    assert mentions_of("FROM visits('a.parquet')", OURS).literals["visits"] == {"a.parquet"}


def test_names_inside_strings_that_name_tables_are_found() -> None:
    assert {"wh", "stops"} <= mentions_of("FROM robust_summary('wh.stops', 'x')", OURS).names
    assert {"wh", "stops"} <= mentions_of("FROM 'wh.stops'", OURS).names
    assert "my stops" in mentions_of("FROM robust_summary('my stops', 'x')", OURS).names
    assert "stops" not in mentions_of("SELECT 'stops'", OURS).names


def test_what_a_statement_creates() -> None:
    assert mentions_of("CREATE OR REPLACE TEMP VIEW a.V AS SELECT 1").created == {"v"}
    assert mentions_of('CREATE TEMP TABLE "B b" AS SELECT 1').created == {"b b"}
    assert mentions_of("CREATE TEMP VIEW IF NOT EXISTS v AS SELECT 1").created == set()


def test_strings_nested_too_deep_count_as_computed() -> None:
    sql = "FROM 'a.csv'"
    for _ in range(8):
        sql = "FROM query('" + sql.replace("'", "''") + "')"
    assert mentions_of(sql).computed
