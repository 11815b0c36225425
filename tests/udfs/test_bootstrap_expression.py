"""What `bootstrap_expression` takes, refuses and promises."""

import math
from typing import Any

import duckdb
import numpy as np
import pytest

from midspread.udfs.tables import bootstrap_expression as module
from tests.udfs.table_calls import answer, complaint

Row = dict[str, Any]
FIELDS = ["n", "n_units", "estimate", "lower", "upper", "se", "resamples"]


def call(expression: str, more: str = "", table: str = "visits") -> str:
    text = expression.replace("'", "''")
    return f"FROM bootstrap_expression('{table}', '{text}', resamples := 40{more})"


def test_columns(larkmoor: duckdb.DuckDBPyConnection) -> None:
    relation = larkmoor.sql(call("avg(dwell_s)", ", by := ['route', 'day']"))
    assert relation.columns == ["route", "day", *FIELDS]
    kinds = [str(kind) for kind in relation.types]
    assert kinds == ["VARCHAR", "DATE", "BIGINT", "BIGINT", *["DOUBLE"] * 4, "BIGINT"]


@pytest.mark.parametrize(
    "expression",
    [
        "sum(visit) / count(dwell_s)",
        "trimmed_mean(dwell_s, 0.1) / median(dwell_s)",
        "trimmed_mean(dwell_s, share := 0.1) - quantile_hf(dwell_s, 0.9)",
        "huber_location(dwell_s)",
        "count(*) FILTER (WHERE dwell_s > 20) / count(*)",
        "count(DISTINCT visit) / count(*)::DOUBLE",
        'SUM("visit") -- why\n + 0 /* and */',
        "max(CASE WHEN ramp_used THEN dwell_s ELSE 0 END)",
        "list_sum(list_transform(list(visit ORDER BY visit), lambda dwell: dwell + 1))",
        "quantile_cont(dwell_s, 0.5 ORDER BY dwell_s)",
        "count(*) FILTER (route = 'R1')",
        "fences(dwell_s).upper",
        "sum(epoch(day)) / 86400",
        "coalesce(min(visit), 0) + sum(1)",
    ],
)
def test_the_estimate_is_what_the_expression_gives(
    larkmoor: duckdb.DuckDBPyConnection, expression: str
) -> None:
    found = answer(larkmoor, call(expression, ", by := 'route'"))
    rows = larkmoor.execute(
        f"SELECT route, count(*), ({expression}\n) FROM visits GROUP BY 1 ORDER BY 1"
    ).fetchall()
    for row, (route, n, estimate) in zip(found, rows, strict=True):
        assert (row["route"], row["n"], row["n_units"]) == (route, n, None)
        assert row["estimate"] == pytest.approx(float(estimate), rel=1e-12)
        assert row["lower"] <= row["upper"]
        assert row["resamples"] == 40


def test_totals_are_resampled_exactly(larkmoor: duckdb.DuckDBPyConnection) -> None:
    for row in answer(larkmoor, call("count(*)", ", by := ['route', 'stop']")):
        assert row["lower"] == row["upper"] == row["estimate"] == row["n"]
        assert row["se"] == 0.0


def test_an_expression_of_the_keys(larkmoor: duckdb.DuckDBPyConnection) -> None:
    found = answer(larkmoor, call("count(*) * length(route)", ", by := ['day', 'route']"))
    assert all(row["upper"] == 2 * row["n"] for row in found)


@pytest.mark.parametrize(
    "expression",
    ["trimmed_mean(dwell_s, 0.1) / qn_scale(dwell_s)", "sum(visit) / count(*)", "median(dwell_s)"],
)
@pytest.mark.parametrize("unit", ["", ", unit := 'visit'", ", unit := 'day'"])
def test_whatever_the_order_the_split_and_the_threads(
    larkmoor: duckdb.DuckDBPyConnection, expression: str, unit: str
) -> None:
    expected = answer(larkmoor, call(expression, ", by := 'route'" + unit))
    for table in ("part-*.parquet", "all.parquet", "(FROM visits ORDER BY hash(visit))"):
        for threads in (1, 2, 4):
            larkmoor.execute(f"SET threads = {threads}")
            assert answer(larkmoor, call(expression, ", by := 'route'" + unit, table)) == expected
    other = answer(larkmoor, call(expression, ", by := 'route', seed := 1" + unit))
    assert [row["se"] for row in other] != [row["se"] for row in expected]


def test_at_a_length_that_takes_many_batches(connection: duckdb.DuckDBPyConnection) -> None:
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE long AS SELECT i % 7 AS route, i % 501 AS vehicle, "
        "(hash(i) % 4000)::INT AS boardings FROM range(200000) AS t(i)"
    )
    sql = (
        "FROM bootstrap_expression('{}', 'sum(boardings) / count(*)', by := 'route', "
        "resamples := 20{})"
    )
    for unit in ("", ", unit := 'vehicle'"):
        expected = answer(connection, sql.format("long", unit))
        shuffled = "(FROM long ORDER BY hash(boardings, vehicle))"
        assert answer(connection, sql.format(shuffled, unit)) == expected


@pytest.mark.parametrize("at_once", [1, 200, 1000])
def test_portions_do_not_show(
    larkmoor: duckdb.DuckDBPyConnection, monkeypatch: pytest.MonkeyPatch, at_once: int
) -> None:
    calls = [call("sum(visit)", ", by := 'route'"), call("median(dwell_s)", ", by := 'stop'")]
    expected = [answer(larkmoor, sql) for sql in calls]
    monkeypatch.setattr(module, "_COPIES_AT_ONCE", at_once)
    monkeypatch.setattr(module, "_COLLECTED_AT_ONCE", at_once)
    assert [answer(larkmoor, sql) for sql in calls] == expected


def test_the_first_resamples_are_the_same_for_any_number(
    connection: duckdb.DuckDBPyConnection,
) -> None:
    """One draw is its own lower limit; of two, one of them is the first."""
    sql = "FROM bootstrap_expression('(FROM range(100) t(x))', 'sum(x)', resamples := {})"
    (one,) = answer(connection, sql.format(1))
    (two,) = answer(connection, sql.format(2))
    assert one["lower"] == one["upper"] and one["se"] is None
    assert one["lower"] in (two["lower"], two["upper"])


def test_columns_that_are_not_read_do_not_matter(larkmoor: duckdb.DuckDBPyConnection) -> None:
    expected = answer(larkmoor, call("median(dwell_s)", ", by := 'route'"))
    narrow = "(SELECT route, dwell_s, uuid() AS noise FROM visits)"
    assert answer(larkmoor, call("median(dwell_s)", ", by := 'route'", narrow)) == expected


def test_tiny_groups(connection: duckdb.DuckDBPyConnection) -> None:
    nothing = "(SELECT 1 AS g, 2.5 AS x WHERE false)"
    (row,) = answer(connection, call("avg(x)", "", nothing))
    assert list(row.values()) == [0, None, None, None, None, None, 0]
    assert answer(connection, call("avg(x)", ", by := 'g'", nothing)) == []
    table = "(FROM (VALUES (1, 2.5), (2, NULL), (NULL, 4), (NULL, 4)) AS t(g, x))"
    found = answer(connection, call("avg(x)", ", by := 'g'", table))
    shown = [(row["g"], row["n"], row["lower"], row["upper"], row["resamples"]) for row in found]
    assert shown == [(1, 1, 2.5, 2.5, 40), (2, 1, None, None, 0), (None, 2, 4.0, 4.0, 40)]


def test_draws_without_a_value(connection: duckdb.DuckDBPyConnection) -> None:
    table = "(SELECT 1 AS a, CASE WHEN i = 0 THEN 1 ELSE 0 END AS b FROM range(5) AS t(i))"
    (row,) = answer(connection, call("sum(a) / nullif(sum(b), 0)", "", table))
    assert 15 < row["resamples"] < 40  # (4/5)^5, a third, draw none of the only divisor
    assert row["lower"] >= 1.0 and row["upper"] <= 5.0
    (spoilt,) = answer(
        connection, call("avg(x)", "", "(FROM (VALUES (1.0), (''nan''::DOUBLE)) AS t(x))")
    )
    assert all(math.isnan(spoilt[name]) for name in ("estimate", "lower", "upper", "se"))


def test_negative_zero(connection: duckdb.DuckDBPyConnection) -> None:
    plain = "(SELECT CASE WHEN i % 3 = 0 THEN 0.0::DOUBLE ELSE i END AS x FROM range(60) t(i))"
    signed = plain.replace("0.0::DOUBLE", "(-0.0)::DOUBLE")
    assert answer(connection, call("trimmed_mean(x)", "", signed)) == answer(
        connection, call("trimmed_mean(x)", "", plain)
    )


def test_units_are_drawn_whole(connection: duckdb.DuckDBPyConnection) -> None:
    """Resampling units is resampling the table of their sums: the same spread within 3 %."""
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE rides AS SELECT i % 23 AS vehicle, "
        "((i % 23) * 3 + hash(i) % 5)::INT AS boardings FROM range(460) AS t(i)"
    )
    (units,) = answer(
        connection,
        "FROM bootstrap_expression('rides', 'sum(boardings) / count(*)', unit := 'vehicle', "
        "resamples := 20000)",
    )
    sums = "(SELECT vehicle, sum(boardings) AS s, count(*) AS n FROM rides GROUP BY vehicle)"
    (table,) = answer(
        connection, f"FROM bootstrap_expression('{sums}', 'sum(s) / sum(n)', resamples := 20000)"
    )
    assert units["n"] == 460 and units["n_units"] == table["n"] == 23
    assert units["estimate"] == table["estimate"]
    for name in ("lower", "upper", "se"):
        assert units[name] == pytest.approx(table[name], rel=0.03)
    (plain,) = answer(connection, "FROM bootstrap_expression('rides', 'sum(boardings) / count(*)')")
    assert plain["se"] < 0.5 * units["se"]


def test_each_row_a_unit_of_its_own_is_no_unit(larkmoor: duckdb.DuckDBPyConnection) -> None:
    found = answer(larkmoor, call("count(*)", ", unit := 'visit', by := 'route'"))
    assert all(row["lower"] == row["upper"] == row["n"] == row["n_units"] for row in found)


def test_coverage(connection: duckdb.DuckDBPyConnection) -> None:
    """400 groups of 100 pairs: the 90 % interval of a ratio of sums holds it 84 to 95 times."""
    generator = np.random.default_rng(5)
    u = generator.gamma(4.0, 5.0, 40_000)
    x = 1.5 * u + generator.normal(0.0, 4.0, u.size)
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE pairs AS SELECT unnest(?) AS u, unnest(?) AS x, "
        "unnest(?) AS g",
        [u.tolist(), x.tolist(), (np.arange(u.size) % 400).tolist()],
    )
    found = answer(
        connection,
        "FROM bootstrap_expression('pairs', 'sum(x) / sum(u)', by := 'g', resamples := 400, "
        "confidence := 0.9)",
    )
    covered = sum(row["lower"] <= 1.5 <= row["upper"] for row in found) / len(found)
    assert 0.84 < covered < 0.95


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        ("'avg(dwell_s)', confidence := 1.5", "confidence must be a number above 0 and below 1,"),
        ("'avg(dwell_s)', confidence := NULL", "confidence must be a number above 0 and below 1,"),
        ("'avg(dwell_s)', resamples := 0", "resamples must be a whole number from 1 to 1e+06,"),
        ("'avg(dwell_s)', resamples := 2.5", "resamples must be a whole number from 1 to 1e+06,"),
        ("'avg(dwell_s)', seed := -1", "seed must be a whole number from 0 to"),
        ("'avg(dwell_s)', unit := 3", "unit must be the name of a column, got 3;"),
        ("'avg(dwell_s)', unit := 'stop'", "unit must not be NULL, and stop is in some rows;"),
        ("'avg(dwell_s)', by := 'estimate'", "by names estimate, which is also a column"),
        ("'max(route)'", "expression must be a number (any integer type"),
        ("'bool_or(ramp_used)'", "expression must be a number (any integer type"),
        ("'list(dwell_s)'", "expression must be a number (any integer type"),
        ("'{a: max(dwell_s)}'", "expression must be a number (any integer type"),
    ],
)
def test_wrong_arguments(
    larkmoor: duckdb.DuckDBPyConnection, arguments: str, sentence: str
) -> None:
    said = complaint(larkmoor, f"FROM bootstrap_expression('visits', {arguments})")
    assert said.startswith(f"bootstrap_expression: {sentence}")
    assert said.endswith(".")


@pytest.mark.parametrize(
    ("expression", "what"),
    [
        ("NULL", "got NULL;"),
        ("3", "got 3;"),
        ("'  '", "got ' ';"),
        ("'dwell_s'", "and there is no aggregate in dwell_s;"),
        ("'round(dwell_s) + 1'", "and there is no aggregate in round(dwell_s) + 1;"),
        ("'rung(dwell_s, 0)'", "and there is no aggregate in rung(dwell_s, 0);"),
        ("'sum(dwell_s), count(*)'", "and this is not one: sum(dwell_s), count(*);"),
        ("'sum(dwell_s) AS total'", "and this is not one: sum(dwell_s) AS total;"),
        ("'sum(dwell_s'", "and this is not one: sum(dwell_s;"),
        ("'sum(dwell_s) FROM visits'", "and this is not one: sum(dwell_s) FROM visits;"),
        ("'sum(dwell_s)) FROM (SELECT 1'", "and this is not one: "),
        ("'sum(dwell_s)) , (1'", "and this is not one: "),
        ("'1) UNION ALL (SELECT 2'", "and this is not one: "),
        ("'sum(dwell_s); DROP TABLE visits'", "and this is not one: "),
        ("'DROP TABLE visits'", "and this is not one: DROP TABLE visits;"),
        ("'(SELECT 1)'", "and must not hold a subquery;"),
        ("'sum((SELECT 1))'", "and must not hold a subquery;"),
        ("'sum(dwell_s) FILTER (EXISTS (FROM visits))'", "and must not hold a subquery;"),
        ("'sum(dwell_s) OVER ()'", "and must not hold a function with OVER;"),
        ("'count(COLUMNS(*))'", "and must not hold a *;"),
        ("'sum(?)'", "and must not hold a parameter to be filled in;"),
        ("'sum(#1)'", "and must not hold a column by number;"),
        ("'sum(random())'", "and must not hold random();"),
        ("'sum(epoch(now() - day))'", "and must not hold now();"),
        ("'nextval(''s'') + sum(1)'", "and must not hold nextval();"),
        ("'sum(unnest([1, 2]))'", "and must not hold unnest();"),
    ],
)
def test_what_is_no_aggregate_expression(
    larkmoor: duckdb.DuckDBPyConnection, expression: str, what: str
) -> None:
    said = complaint(larkmoor, f"FROM bootstrap_expression('visits', {expression})")
    start = "bootstrap_expression: expression must be one SQL aggregate expression, "
    assert said.startswith(start + what)
    assert said.endswith("; write for example expression := 'sum(boardings) / sum(dwell_s)'.")
    assert larkmoor.execute("SELECT count(*) FROM visits").fetchall() == [(200,)]


@pytest.mark.parametrize(
    ("call_", "named"),
    [
        ("'visits', 'sum(dwell)'", '"dwell"'),
        ("'nowhere', 'sum(dwell_s)'", "nowhere"),
        ("'visits', 'sum(dwell_s)', by := 'depot'", '"depot"'),
        ("'visits', 'sum(dwell_s)', unit := 'depot'", '"depot"'),
        ("'visits', 'no_such(dwell_s)'", "no_such"),
        ("'visits', 'trimmed_mean(dwell_s, 0.7)'", "trimmed_mean: share must be"),
    ],
)
def test_what_is_missing_is_named(
    larkmoor: duckdb.DuckDBPyConnection, call_: str, named: str
) -> None:
    assert named in complaint(larkmoor, f"FROM bootstrap_expression({call_})")


@pytest.mark.parametrize(
    "name", ["n", "estimate", "resamples", "r", "g", "x", "function_name", "two words", 'a"b', "ß"]
)
def test_columns_of_any_name(larkmoor: duckdb.DuckDBPyConnection, name: str) -> None:
    quoted = '"' + name.replace('"', '""') + '"'
    table = f'(SELECT dwell_s AS {quoted}, route AS "{name.replace(chr(34), "")} key" FROM visits)'
    by = f", by := '{name.replace(chr(34), '')} key'"
    found = answer(larkmoor, call(f"median({quoted})", by, table))
    expected = answer(larkmoor, call("median(dwell_s)", ", by := 'route'"))
    assert [list(row.values()) for row in found] == [list(row.values()) for row in expected]


def test_in_views_joins_and_prepared_statements(larkmoor: duckdb.DuckDBPyConnection) -> None:
    inner = call("avg(visit)", ", by := 'route'")
    expected = answer(larkmoor, inner)
    larkmoor.execute(f"CREATE OR REPLACE TEMP VIEW spread AS {inner}")
    assert answer(larkmoor, "FROM spread ORDER BY route") == expected
    assert larkmoor.execute(
        f"SELECT count(*) FROM visits JOIN ({inner}) USING (route)"
    ).fetchall() == [(200,)]
    larkmoor.execute("PREPARE spread AS FROM bootstrap_expression(?, ?, by := ?, resamples := 40)")
    given = larkmoor.execute("EXECUTE spread('visits', 'avg(visit)', 'route')").fetchall()
    assert given == [tuple(row.values()) for row in expected]
    within = answer(larkmoor, "WITH few AS (FROM visits) " + call("sum(visit)", "", "few"))
    assert within == answer(larkmoor, call("sum(visit)"))
