"""The functions in every form of query that takes an aggregate of the engine's own."""

from collections.abc import Iterator
from pathlib import Path

import duckdb
import numpy as np
import pytest

from midspread.udfs import functions, register
from tests.udfs.calling import AGGREGATES, call

VISITS = """
    CREATE TABLE visits AS
    SELECT i AS visit, 'route ' || (i % 3 + 1) AS route,
        ['peak', 'off-peak'][i % 2 + 1] AS day_part,
        CASE WHEN i % 11 = 0 THEN NULL ELSE (hash(i) % 900) / 10.0 END AS dwell_s,
        (hash(i + 1) % 40)::INTEGER AS boardings
    FROM range(600) AS t(i)
"""
MINE = "trimmed_mean(dwell_s, 0.1)"


@pytest.fixture(scope="module")
def visits() -> Iterator[duckdb.DuckDBPyConnection]:
    with duckdb.connect() as connection:
        register(connection)
        connection.execute(VISITS)
        yield connection


def trimmed(values: list[float | None], share: float = 0.1) -> float:
    """The trimmed mean again, by numpy."""
    x = np.sort([float(v) for v in values if v is not None])
    g = int(share * x.size)
    return float(np.mean(x[g : x.size - g]))


def expected(visits: duckdb.DuckDBPyConnection, where: str = "true", share: float = 0.1) -> object:
    values = visits.execute(f"SELECT dwell_s FROM visits WHERE {where}").fetchall()
    return pytest.approx(trimmed([v for (v,) in values], share), rel=1e-13)


def test_group_by(visits: duckdb.DuckDBPyConnection) -> None:
    found = visits.execute(f"SELECT route, {MINE} FROM visits GROUP BY route").fetchall()
    assert len(found) == 3
    for route, figure in found:
        assert figure == expected(visits, f"route = '{route}'")
    everything = visits.execute(f"SELECT route, {MINE} FROM visits GROUP BY ALL").fetchall()
    assert sorted(everything) == sorted(found)


@pytest.mark.parametrize(
    ("grouping", "count"),
    [
        ("ROLLUP (route, day_part)", 6 + 3 + 1),
        ("CUBE (route, day_part)", 6 + 3 + 2 + 1),
        ("GROUPING SETS ((route), (day_part), ())", 3 + 2 + 1),
    ],
)
def test_grouping_sets(visits: duckdb.DuckDBPyConnection, grouping: str, count: int) -> None:
    query = f"SELECT route, day_part, {MINE} FROM visits GROUP BY {grouping}"
    found = visits.execute(query).fetchall()
    assert len(found) == count
    for route, day_part, figure in found:
        where = f"(route = '{route}' OR {route is None})"
        where += f" AND (day_part = '{day_part}' OR {day_part is None})"
        assert figure == expected(visits, where)


def test_null_is_a_group(visits: duckdb.DuckDBPyConnection) -> None:
    keys = "nullif(route, 'route 1')"
    found = visits.execute(f"SELECT {keys} AS r, {MINE} FROM visits GROUP BY r").fetchall()
    assert dict(found)[None] == expected(visits, "route = 'route 1'")


def test_having_order_by_limit(visits: duckdb.DuckDBPyConnection) -> None:
    per_route = dict(visits.execute(f"SELECT route, {MINE} FROM visits GROUP BY route").fetchall())
    cut = sorted(per_route.values())[1]
    kept = visits.execute(
        f"SELECT route FROM visits GROUP BY route HAVING {MINE} >= {cut!r} ORDER BY {MINE} DESC"
    ).fetchall()
    by_figure = sorted(per_route, key=lambda route: -per_route[route])
    assert [route for (route,) in kept] == by_figure[:2]
    top = visits.execute(f"SELECT route FROM visits GROUP BY route ORDER BY {MINE} LIMIT 1")
    assert top.fetchall() == [(by_figure[-1],)]


def test_qualify(visits: duckdb.DuckDBPyConnection) -> None:
    found = visits.execute(
        f"SELECT route, day_part, {MINE} AS typical FROM visits GROUP BY route, day_part "
        f"QUALIFY row_number() OVER (PARTITION BY route ORDER BY {MINE} DESC) = 1"
    ).fetchall()
    assert len(found) == 3
    for route, day_part, figure in found:
        other = {"peak": "off-peak", "off-peak": "peak"}[day_part]
        assert figure == expected(visits, f"route = '{route}' AND day_part = '{day_part}'")
        lower = visits.execute(
            f"SELECT {MINE} FROM visits WHERE route = '{route}' AND day_part = '{other}'"
        ).fetchall()
        assert lower[0][0] <= figure


def test_ctes_views_and_subqueries(visits: duckdb.DuckDBPyConnection) -> None:
    peak = expected(visits, "day_part = 'peak'")
    queries = [
        f"WITH peak AS (FROM visits WHERE day_part = 'peak') SELECT {MINE} FROM peak",
        f"SELECT {MINE} FROM (SELECT * FROM visits WHERE day_part = 'peak')",
        f"WITH a AS (SELECT {MINE} AS m FROM visits WHERE day_part = 'peak') SELECT m FROM a",
        f"SELECT (SELECT {MINE} FROM visits WHERE day_part = 'peak')",
        f"FROM visits SELECT {MINE} WHERE day_part = 'peak'",
    ]
    for query in queries:
        assert visits.execute(query).fetchall() == [(peak,)], query
    visits.execute(
        f"CREATE OR REPLACE TEMP VIEW v AS SELECT day_part, {MINE} AS m FROM visits GROUP BY 1"
    )
    assert visits.execute("SELECT m FROM v WHERE day_part = 'peak'").fetchall() == [(peak,)]
    visits.execute("DROP VIEW v")


def test_correlated_subquery(visits: duckdb.DuckDBPyConnection) -> None:
    found = visits.execute(
        f"SELECT r.route, (SELECT {MINE} FROM visits AS v WHERE v.route = r.route) "
        "FROM (SELECT DISTINCT route FROM visits) AS r"
    ).fetchall()
    assert len(found) == 3
    for route, figure in found:
        assert figure == expected(visits, f"route = '{route}'")


def test_joins(visits: duckdb.DuckDBPyConnection) -> None:
    areas = "(VALUES ('route 1', 'town'), ('route 2', 'town'), ('route 3', 'coast'))"
    found = visits.execute(
        f"SELECT area, trimmed_mean(v.dwell_s, share := 0.1) FROM visits v "
        f"JOIN {areas} AS r(route, area) USING (route) GROUP BY area"
    ).fetchall()
    assert dict(found)["coast"] == expected(visits, "route = 'route 3'")
    assert dict(found)["town"] == expected(visits, "route <> 'route 3'")
    nothing = visits.execute(
        f"SELECT r.area, {MINE} FROM (VALUES ('route 9', 'hills')) r(route, area) "
        "LEFT JOIN visits USING (route) GROUP BY area"
    ).fetchall()
    assert nothing == [("hills", None)]


def test_expressions_around_and_inside(visits: duckdb.DuckDBPyConnection) -> None:
    found = visits.execute(
        "SELECT round(2 * trimmed_mean(dwell_s / 60, 0.1) - 1, 9), "
        "trimmed_mean(CASE WHEN boardings > 20 THEN dwell_s END, 0.05 + 0.05), "
        "coalesce(trimmed_mean(dwell_s) , -1) > avg(0) FROM visits"
    ).fetchall()[0]
    plain = visits.execute(f"SELECT {MINE} FROM visits").fetchall()[0][0]
    assert found[0] == pytest.approx(2 * plain / 60 - 1, abs=2e-9)
    assert found[1] == expected(visits, "boardings > 20")
    assert found[2] is True


def test_beside_the_engines_own(visits: duckdb.DuckDBPyConnection) -> None:
    for ours, own in (
        ("trimmed_mean(dwell_s, 0.5)", "median(dwell_s)"),
        ("trimmed_mean(dwell_s, 0)", "avg(dwell_s)"),
        ("winsorized_sd(dwell_s, 0)", "stddev_samp(dwell_s)"),
        ("quantile_hf(dwell_s, 0.3)", "quantile_cont(dwell_s, 0.3)"),
        ("mad_scale(dwell_s) * 0.6744897501960817", "mad(dwell_s)"),
    ):
        rows = visits.execute(f"SELECT route, {ours}, {own} FROM visits GROUP BY route").fetchall()
        for _, mine, theirs in rows:
            assert mine == pytest.approx(theirs, rel=1e-13)


def test_prepared_statements(visits: duckdb.DuckDBPyConnection) -> None:
    query = "SELECT trimmed_mean(dwell_s, ?) FROM visits WHERE route = ?"
    for share, route in ((0.1, "route 1"), (0.25, "route 2")):
        found = visits.execute(query, [share, route]).fetchall()
        assert found == [(expected(visits, f"route = '{route}'", share),)]
    named = visits.execute("SELECT trimmed_mean(dwell_s, share := $s) FROM visits", {"s": 0.1})
    assert named.fetchall() == [(expected(visits),)]
    visits.execute("PREPARE cut AS SELECT trimmed_mean(dwell_s, $1) FROM visits")
    assert visits.execute("EXECUTE cut(0.1)").fetchall() == [(expected(visits),)]
    visits.execute("DEALLOCATE cut")


def test_record_results(visits: duckdb.DuckDBPyConnection) -> None:
    whole = visits.execute("SELECT fences(dwell_s, 3) FROM visits").fetchall()[0][0]
    assert list(whole) == ["lower", "upper"]
    dotted = "SELECT fences(dwell_s, 3).lower, (fences(dwell_s, k := 3)).upper FROM visits"
    assert visits.execute(dotted).fetchall() == [tuple(whole.values())]
    unnested = visits.execute("SELECT unnest(fences(dwell_s, 3)) FROM visits")
    assert [column[0] for column in unnested.description] == ["lower", "upper"]
    assert unnested.fetchall() == [tuple(whole.values())]
    outside = visits.execute(
        "WITH f AS (SELECT route, fences(dwell_s, 0.2) AS f FROM visits GROUP BY route) "
        "SELECT count(*) FROM visits JOIN f USING (route) "
        "WHERE dwell_s NOT BETWEEN f.lower AND f.upper"
    ).fetchall()[0][0]
    assert 0 < outside < 600
    with pytest.raises(duckdb.BinderException, match="lowre"):
        visits.execute("SELECT fences(dwell_s).lowre FROM visits")


def test_lists_of_records(visits: duckdb.DuckDBPyConnection) -> None:
    rows = visits.execute(
        "SELECT route, unnest(letter_values(dwell_s), recursive := true) FROM visits GROUP BY route"
    )
    assert [c[0] for c in rows.description][:4] == ["route", "letter", "depth", "lower"]
    medians = {row[0]: row[3] for row in rows.fetchall() if row[1] == "M"}
    own = visits.execute("SELECT route, median(dwell_s) FROM visits GROUP BY route").fetchall()
    assert medians == pytest.approx(dict(own))


@pytest.mark.parametrize(
    "name", ["x", "share", "w", "by", "power", "k", "c", "prob", "kind", "value", "tbl", "deep"]
)
def test_columns_named_like_our_parameters(visits: duckdb.DuckDBPyConnection, name: str) -> None:
    """Nobody's column is caught, as a value, a weight, a setting or a key."""
    quoted = f'"{name}"'
    calls = [call(f, [quoted, "boardings"][: len(f.columns)]) for f in AGGREGATES]
    plain = [call(f, ["dwell_s", "boardings"][: len(f.columns)]) for f in AGGREGATES]
    source = f"(SELECT * RENAME (dwell_s AS {quoted}) FROM visits)"
    mine = visits.execute(f"SELECT route, {', '.join(calls)} FROM {source} GROUP BY ALL ORDER BY 1")
    found = mine.fetchall()
    own = visits.execute(f"SELECT route, {', '.join(plain)} FROM visits GROUP BY ALL ORDER BY 1")
    assert found == own.fetchall()

    source = f"(SELECT dwell_s, boardings % 3 / 10.0 AS {quoted} FROM visits)"
    keyed = visits.execute(
        f"SELECT {quoted}, trimmed_mean(dwell_s, {quoted}), "
        f"trimmed_mean(dwell_s, share := {quoted}) FROM {source} GROUP BY {quoted}"
    ).fetchall()
    for value, positional, by_name in keyed:
        where = f"boardings % 3 / 10.0 = {value}"
        assert positional == by_name == expected(visits, where, float(value))
    weights = visits.execute(
        f"SELECT weighted_median(dwell_s, {quoted}), weighted_median({quoted}, dwell_s) "
        f"FROM {source}"
    ).fetchall()
    assert None not in weights[0]


def test_cursors_and_repeated_registration(visits: duckdb.DuckDBPyConnection) -> None:
    cursor = visits.cursor()
    with pytest.raises(duckdb.CatalogException):
        cursor.execute(f"SELECT {MINE} FROM visits")  # macros belong to a connection
    for _ in range(2):
        register(cursor)
        assert cursor.execute(f"SELECT {MINE} FROM visits").fetchall() == [(expected(visits),)]
    register(visits)
    assert visits.execute(f"SELECT {MINE} FROM visits").fetchall() == [(expected(visits),)]
    cursor.close()
    assert visits.execute(f"SELECT {MINE} FROM visits").fetchall() == [(expected(visits),)]


def test_a_file_keeps_nothing_of_ours(tmp_path: Path) -> None:
    """No macro or function stays in a user's database, and a read-only one works too."""
    path = tmp_path / "larkmoor.duckdb"
    with duckdb.connect(path) as connection:
        connection.execute(VISITS)
    before = path.read_bytes()
    for read_only in (False, True):
        with duckdb.connect(path, read_only=read_only) as connection:
            register(connection)
            found = connection.execute(f"SELECT {MINE} FROM visits").fetchall()
            assert found == [(expected(connection),)]
    assert path.read_bytes() == before
    with duckdb.connect(path, read_only=True) as connection:
        kept = connection.execute(
            "SELECT count(*) FROM duckdb_functions() WHERE NOT internal OR function_name IN "
            f"({', '.join(repr(name) for name in functions())})"
        ).fetchall()
        assert kept == [(0,)]


def test_after_use_of_another_database(tmp_path: Path) -> None:
    path = tmp_path / "warehouse.duckdb"
    with duckdb.connect(path) as connection:
        connection.execute(VISITS)
    with duckdb.connect() as connection:
        register(connection)
        connection.execute(f"ATTACH '{path}' AS warehouse (READ_ONLY)")
        qualified = connection.execute(f"SELECT {MINE} FROM warehouse.visits").fetchall()
        connection.execute("USE warehouse")
        assert connection.execute(f"SELECT {MINE} FROM visits").fetchall() == qualified


def test_many_rows_in_and_out(visits: duckdb.DuckDBPyConnection) -> None:
    """More groups than one batch holds, and results as a table and as Arrow."""
    query = (
        "SELECT visit // 2 AS pair, trimmed_mean(visit) AS m "
        "FROM range(20000) AS many(visit) GROUP BY pair"
    )
    visits.execute(f"CREATE OR REPLACE TEMP TABLE pairs AS {query}")
    wrong = visits.execute("SELECT count(*) FROM pairs WHERE m IS DISTINCT FROM pair * 2 + 0.5")
    assert wrong.fetchall() == [(0,)]
    arrow = visits.sql(query).to_arrow_table()
    assert arrow.num_rows == 10000 and arrow.column("m").null_count == 0
