"""Which tables, keys and names the table functions take, and where they may stand."""

from pathlib import Path

import duckdb
import pytest

from midspread.udfs import functions
from tests.udfs.table_calls import ALL_CALLS, CALLS, EVERY, EVERY_TABLE, answer, complaint


@EVERY_TABLE
@pytest.mark.parametrize(
    "table",
    [
        "visits",
        "VISITS",
        " visits ",
        "viewed",
        "main.visits",
        "memory.main.visits",
        "warehouse.visits",
        "warehouse.main.visits",
        'warehouse."bus depot"."Straßen & visits"',
        '"warehouse"."bus depot"."Straßen & visits"',
        "my visits",
        '"my visits"',
        "all.parquet",
        "all.csv",
        "two words.parquet",
        "part-*.parquet",
        "(SELECT * FROM visits)",
        "(FROM visits)",
        "(FROM visits) AS v",
        "read_csv('all.csv')",
        "read_parquet(['part-0.parquet', 'part-1.parquet'])",
        "(WITH q AS (FROM visits) SELECT * FROM q WHERE visit >= 0)",
        "(FROM visits WHERE visit < 50) UNION ALL (FROM visits WHERE visit >= 50)",
    ],
)
def test_every_kind_of_table_gives_the_same(
    larkmoor: duckdb.DuckDBPyConnection, function: str, table: str
) -> None:
    expected = answer(larkmoor, "FROM " + ALL_CALLS[function].format("'visits'", ", by := 'route'"))
    quoted = "'" + table.replace("'", "''") + "'"
    given = answer(larkmoor, "FROM " + ALL_CALLS[function].format(quoted, ", by := 'route'"))
    assert given == expected
    assert len(expected) >= 3


@EVERY_TABLE
def test_full_paths_and_globs(larkmoor: duckdb.DuckDBPyConnection, function: str) -> None:
    ((folder,),) = larkmoor.execute("SELECT path FROM folder").fetchall()
    expected = answer(larkmoor, "FROM " + ALL_CALLS[function].format("'visits'", ""))
    for path in (Path(folder) / "all.parquet", Path(folder) / "part-?.parquet"):
        assert answer(larkmoor, "FROM " + ALL_CALLS[function].format(f"'{path}'", "")) == expected


@EVERY_TABLE
def test_a_cte_is_seen_and_goes_before_a_table(
    larkmoor: duckdb.DuckDBPyConnection, function: str
) -> None:
    for name in ("few", "visits"):
        call = ALL_CALLS[function].format(f"'{name}'", "")
        rows = answer(larkmoor, f"WITH {name} AS (FROM viewed LIMIT 6) SELECT * FROM {call}")
        expected = ALL_CALLS[function].format("'(FROM viewed LIMIT 6)'", "")
        assert rows == answer(larkmoor, f"FROM {expected}")


@EVERY
@pytest.mark.parametrize(
    ("by", "keys"),
    [
        ("'route'", ["route"]),
        ("['route']", ["route"]),
        ("['day', 'route']", ["day", "route"]),
        ("[]", []),
        ("NULL", []),
    ],
)
def test_by_takes_a_list_one_name_or_nothing(
    larkmoor: duckdb.DuckDBPyConnection, function: str, by: str, keys: list[str]
) -> None:
    given = answer(larkmoor, "FROM " + CALLS[function].format("'visits'", f", by := {by}"))
    assert list(given[0])[: len(keys)] == keys
    listed = ", ".join(["1", *keys])
    groups = larkmoor.execute(f"SELECT DISTINCT {listed} FROM visits").fetchall()
    assert len({tuple(row[key] for key in keys) for row in given}) == len(groups)


ODD_NAMES = ("two words", 'a "quoted" one', "it's", "Straße", "停留", "semi;colon", "a.b", "a--b")


@EVERY
@pytest.mark.parametrize("name", ODD_NAMES)
def test_names_with_spaces_quotes_and_other_letters(
    larkmoor: duckdb.DuckDBPyConnection, function: str, name: str
) -> None:
    identifier = '"' + name.replace('"', '""') + '"'
    text = name.replace("'", "''")
    other_key = f"{text} too"
    larkmoor.execute(
        f"CREATE OR REPLACE TEMP TABLE {identifier} AS SELECT route AS {identifier}, "
        f'dwell_s AS "{other_key.replace(chr(34), chr(34) * 2).replace(chr(39) * 2, chr(39))}" '
        ", ramp_used FROM visits"
    )
    quoted_table = text if "." not in name else identifier
    call = CALLS[function].format(f"'{quoted_table}'", f", by := '{text}'")
    rows = answer(larkmoor, f"FROM {call.replace('dwell_s', other_key)}")
    expected = answer(larkmoor, "FROM " + CALLS[function].format("'visits'", ", by := 'route'"))
    ignored = {"column_name", "n_duplicated_rows", "expression", "y_expression", "x_expression"}
    assert [[v for k, v in row.items() if k not in ignored] for row in rows] == [
        [v for k, v in row.items() if k not in ignored] for row in expected
    ]
    assert next(iter(rows[0])) == name


OWN_NAMES = """
    x w s share by power function_name column_name tbl value list columns position kind deep
    shares starts g n counts
""".split()  # noqa: SIM905 - a name a line would be long


@EVERY
@pytest.mark.parametrize("name", OWN_NAMES)
def test_a_column_named_like_a_parameter_is_the_column(
    larkmoor: duckdb.DuckDBPyConnection, function: str, name: str
) -> None:
    table = f'(SELECT dwell_s AS "{name}", route, ramp_used FROM visits)'
    call = CALLS[function].format(f"'{table}'", ", by := 'route'").replace("'dwell_s'", f"'{name}'")
    expected = answer(larkmoor, "FROM " + CALLS[function].format("'visits'", ", by := 'route'"))
    rows = answer(larkmoor, f"FROM {call}")
    ignored = {"column_name", "n_duplicated_rows", "expression", "y_expression", "x_expression"}
    for row, other in zip(rows, expected, strict=True):
        assert {k: v for k, v in row.items() if k not in ignored} == {
            k: v for k, v in other.items() if k not in ignored
        }


@EVERY
@pytest.mark.parametrize("name", OWN_NAMES)
def test_a_key_named_like_a_parameter_is_the_key(
    larkmoor: duckdb.DuckDBPyConnection, function: str, name: str
) -> None:
    table = f"'(SELECT dwell_s, ramp_used, route AS \"{name}\" FROM visits)'"
    call = "FROM " + CALLS[function].format(table, f", by := '{name}'")
    if name in functions()[function].fields:
        assert f"{function}: by names {name}, which is also" in complaint(larkmoor, call)
    else:
        assert answer(larkmoor, call)[0][name] == "R0"


@EVERY
def test_in_joins_subqueries_views_and_prepared_statements(
    larkmoor: duckdb.DuckDBPyConnection, function: str
) -> None:
    call = CALLS[function].format("'visits'", ", by := 'route'")
    rows = len(answer(larkmoor, f"FROM {call}"))
    joined = f"SELECT count(*) FROM visits JOIN {call} AS figures USING (route)"
    assert larkmoor.execute(joined).fetchall() == [(200 * rows // 3,)]
    nested = f"SELECT (SELECT count(*) FROM {call}), x FROM (SELECT max(route) AS x FROM {call})"
    assert larkmoor.execute(nested).fetchall() == [(rows, "R2")]
    within = f"WITH figures AS (FROM {call}) SELECT count(*) FROM figures a, figures b"
    assert larkmoor.execute(within).fetchall() == [(rows * rows,)]
    larkmoor.execute(f"CREATE OR REPLACE TEMP VIEW figures_view AS FROM {call}")
    assert larkmoor.execute("SELECT count(*) FROM figures_view").fetchall() == [(rows,)]
    larkmoor.execute(f"PREPARE figures AS SELECT count(*) FROM {call}")
    assert larkmoor.execute("EXECUTE figures").fetchall() == [(rows,)]
    given = "SELECT count(*) FROM " + CALLS[function].format("?", ", by := ?")
    assert larkmoor.execute(given, ["visits", ["route"]]).fetchall() == [(rows,)]
    filtered = f"SELECT route, count(*) FROM {call} WHERE route <> 'R1' GROUP BY ALL HAVING true"
    assert len(larkmoor.execute(filtered).fetchall()) == 2


def test_one_table_function_feeds_another(larkmoor: duckdb.DuckDBPyConnection) -> None:
    summary = "robust_summary('visits', 'dwell_s', by := 'stop')"
    text = summary.replace("'", "''")
    for table in (text, f"(FROM {text})"):
        (row,) = answer(larkmoor, f"FROM trim_path('{table}', 'median', shares := 0)")
        assert row["n_kept"] == 5
    itself = f"WITH earlier AS (FROM {summary}) SELECT n FROM robust_summary('earlier', 'median')"
    assert answer(larkmoor, itself) == [{"n": 5}]
    said = complaint(larkmoor, f"FROM robust_summary('{text}', 'median')")
    assert said.startswith("robust_summary: tbl must not call robust_summary itself;")


def test_in_select_the_engine_says_where_it_goes(larkmoor: duckdb.DuckDBPyConnection) -> None:
    assert "FROM clause" in complaint(larkmoor, "SELECT robust_summary('visits', 'dwell_s')")
