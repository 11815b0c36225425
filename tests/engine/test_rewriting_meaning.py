"""Rewritten queries give what the same query means without the rewrite."""

import math
from collections.abc import Callable
from typing import Any, Final

import duckdb
import pytest

from midspread.engine.rewriting import rewrite
from midspread.udfs import functions

Rows = list[tuple[Any, ...]]

# A query with a rewrite, and plain SQL that means the same by the definition of the clause.
BY_DEFINITION: Final = {
    "FILTER": (
        "SELECT route, trimmed_mean(dwell_s, 0.1) FILTER (WHERE ramp_used) FROM visits GROUP BY 1",
        "SELECT route, trimmed_mean(CASE WHEN ramp_used THEN dwell_s END, 0.1) "
        "FROM visits GROUP BY 1",
    ),
    "FILTER with NULL conditions": (
        "SELECT mad_scale(dwell_s) FILTER (route <> 'R1'), count(*) FILTER (route <> 'R1') "
        "FROM visits",
        "SELECT mad_scale(dwell_s), count(*) FROM visits WHERE route <> 'R1'",
    ),
    "FILTER that leaves nothing": (
        "SELECT route, mad_scale(dwell_s) FILTER (WHERE dwell_s < 0) FROM visits GROUP BY 1",
        "SELECT DISTINCT route, NULL::DOUBLE FROM visits",
    ),
    "FILTER on two columns": (
        "SELECT weighted_median(dwell_s, boardings) FILTER (WHERE ramp_used) FROM visits",
        "SELECT weighted_median(dwell_s, boardings) FROM visits WHERE ramp_used",
    ),
    "FILTER on records": (
        "SELECT unnest(l_moments(dwell_s) FILTER (WHERE ramp_used)) FROM visits",
        "SELECT unnest(l_moments(dwell_s)) FROM visits WHERE ramp_used",
    ),
    "FILTER within FILTER": (
        "SELECT mad_scale(dwell_s) FILTER (WHERE dwell_s < (SELECT trimmed_mean(dwell_s) "
        "FILTER (WHERE ramp_used) FROM visits)) FROM visits",
        "SELECT mad_scale(dwell_s) FROM visits WHERE dwell_s < "
        "(SELECT trimmed_mean(dwell_s) FROM visits WHERE ramp_used)",
    ),
    "FILTER in HAVING and ORDER BY": (
        "SELECT route FROM visits GROUP BY route HAVING mad_scale(dwell_s) "
        "FILTER (WHERE ramp_used) > 9 ORDER BY iqr_scale(dwell_s) FILTER (WHERE ramp_used)",
        "SELECT route FROM visits WHERE ramp_used GROUP BY route HAVING mad_scale(dwell_s) > 9",
    ),
    "FILTER in a PIVOT's source": (
        "PIVOT (SELECT route, direction, trimmed_mean(dwell_s) FILTER (WHERE ramp_used) AS m "
        "FROM visits GROUP BY ALL) ON direction USING first(m)",
        "PIVOT (SELECT route, direction, trimmed_mean(dwell_s) AS m FROM visits WHERE ramp_used "
        "GROUP BY ALL) ON direction USING first(m)",
    ),
    "FILTER in a query handed over as text": (
        "SELECT n, trimmed_mean_10 FROM robust_summary(tbl := '(SELECT stop, mad_scale(dwell_s) "
        "FILTER (stop <> ''stop 1'') AS m FROM visits GROUP BY stop)', value := 'm')",
        "SELECT count(*), trimmed_mean(m, 0.1) FROM (SELECT mad_scale(dwell_s) AS m FROM visits "
        "WHERE stop <> 'stop 1' GROUP BY stop)",
    ),
    "DISTINCT in a query handed over as text": (
        "FROM query('SELECT mad_scale(DISTINCT boardings) AS m FROM visits')",
        "SELECT mad_scale(boardings) FROM (SELECT DISTINCT boardings FROM visits)",
    ),
    "DISTINCT": (
        "SELECT route, trimmed_mean(DISTINCT boardings, 0.1), mad_scale(DISTINCT boardings) "
        "FROM visits GROUP BY 1",
        "SELECT route, trimmed_mean(boardings, 0.1), mad_scale(boardings) "
        "FROM (SELECT DISTINCT route, boardings FROM visits) GROUP BY 1",
    ),
    "DISTINCT with FILTER": (
        "SELECT trimmed_mean(DISTINCT boardings) FILTER (WHERE ramp_used) FROM visits",
        "SELECT trimmed_mean(boardings) FROM (SELECT DISTINCT boardings FROM visits "
        "WHERE ramp_used)",
    ),
    "DISTINCT over nothing": (
        "SELECT mad_scale(DISTINCT dwell_s) FROM visits WHERE false",
        "SELECT NULL::DOUBLE",
    ),
    "DISTINCT with a parameter by group": (
        "SELECT vehicle, trimmed_mean(DISTINCT dwell_s, vehicle / 10) FROM visits GROUP BY 1",
        "SELECT vehicle, trimmed_mean(dwell_s, vehicle / 10) "
        "FROM (SELECT DISTINCT vehicle, dwell_s FROM visits) GROUP BY 1",
    ),
    "ORDER BY inside": (
        "SELECT trimmed_mean(dwell_s, 0.1 ORDER BY visit DESC) FROM visits",
        "SELECT trimmed_mean(dwell_s, 0.1) FROM visits",
    ),
    "OVER with NULL keys": (
        "SELECT visit, mad_scale(dwell_s) OVER (PARTITION BY route) FROM visits",
        "SELECT visit, m FROM visits JOIN (SELECT route AS r, mad_scale(dwell_s) AS m FROM visits "
        "GROUP BY 1) ON route IS NOT DISTINCT FROM r",
    ),
    "OVER ()": (
        "SELECT visit, dwell_s - trimmed_mean(dwell_s) OVER () FROM visits WHERE boardings > 2",
        "SELECT visit, dwell_s - (SELECT trimmed_mean(dwell_s) FROM visits WHERE boardings > 2) "
        "FROM visits WHERE boardings > 2",
    ),
    "OVER () of no rows": (
        "SELECT mad_scale(dwell_s) OVER () FROM visits WHERE false",
        "SELECT dwell_s FROM visits WHERE false",
    ),
    "OVER keeps repeated rows": (
        "SELECT route, mad_scale(dwell_s) OVER (PARTITION BY route) "
        "FROM (SELECT * FROM visits UNION ALL SELECT * FROM visits)",
        "SELECT route, m FROM (SELECT route FROM visits UNION ALL SELECT route FROM visits) JOIN "
        "(SELECT route AS r, mad_scale(dwell_s) AS m FROM (SELECT * FROM visits UNION ALL "
        "SELECT * FROM visits) GROUP BY 1) ON route IS NOT DISTINCT FROM r",
    ),
    "OVER with FILTER": (
        "SELECT visit, mad_scale(dwell_s) FILTER (WHERE ramp_used) OVER (PARTITION BY stop) "
        "FROM visits",
        "SELECT visit, m FROM visits JOIN (SELECT stop AS s, mad_scale(CASE WHEN ramp_used THEN "
        "dwell_s END) AS m FROM visits GROUP BY 1) ON stop = s",
    ),
    "OVER with DISTINCT": (
        "SELECT visit, trimmed_mean(DISTINCT boardings, 0.1) OVER (PARTITION BY stop) FROM visits",
        "SELECT visit, m FROM visits JOIN (SELECT stop AS s, trimmed_mean(boardings, 0.1) AS m "
        "FROM (SELECT DISTINCT stop, boardings FROM visits) GROUP BY 1) ON stop = s",
    ),
    "OVER in QUALIFY only": (
        "SELECT visit FROM visits "
        "QUALIFY dwell_s > 2 * mad_scale(dwell_s) OVER (PARTITION BY stop)",
        "SELECT visit FROM visits JOIN (SELECT stop AS s, mad_scale(dwell_s) AS m FROM visits "
        "GROUP BY 1) ON stop = s WHERE dwell_s > 2 * m",
    ),
    "QUALIFY keeps ranking after it": (
        "SELECT visit FROM visits QUALIFY row_number() OVER (PARTITION BY stop ORDER BY visit) = 1 "
        "AND mad_scale(dwell_s) OVER (PARTITION BY stop) > 8",
        "SELECT min(visit) FROM visits GROUP BY stop HAVING mad_scale(dwell_s) > 8",
    ),
    "LIMIT and ORDER BY": (
        "SELECT visit, mad_scale(dwell_s) OVER (PARTITION BY stop) AS m FROM visits "
        "ORDER BY m DESC, visit LIMIT 7 OFFSET 2",
        "SELECT visit, m FROM visits JOIN (SELECT stop AS s, mad_scale(dwell_s) AS m FROM visits "
        "GROUP BY 1) ON stop = s ORDER BY m DESC, visit LIMIT 7 OFFSET 2",
    ),
    "names of items": (
        "SELECT dwell_s / 60 AS minutes, trimmed_mean(minutes) OVER (PARTITION BY stop) AS t, "
        "minutes - t FROM visits",
        "SELECT dwell_s / 60, t, dwell_s / 60 - t FROM visits JOIN (SELECT stop AS s, "
        "trimmed_mean(dwell_s / 60) AS t FROM visits GROUP BY 1) ON stop = s",
    ),
    "a column before an item's name": (
        "SELECT boardings AS dwell_s, mad_scale(dwell_s) OVER () FROM visits",
        "SELECT boardings, (SELECT mad_scale(dwell_s) FROM visits) FROM visits",
    ),
}

# Queries that DuckDB also runs as they are (or with each call under OVER done row by row).
FASTER: Final = [
    "SELECT route, trimmed_mean(dwell_s, 0.1), mad_scale(dwell_s) FROM visits GROUP BY route",
    "SELECT route, stop, trimmed_mean(dwell_s), iqr_scale(dwell_s), grouping(route) FROM visits "
    "GROUP BY ROLLUP (route, stop)",
    "SELECT trimmed_mean(dwell_s, 0), trimmed_mean(dwell_s, 0.5), trimean(dwell_s), count(*), "
    "bowley_skew(dwell_s) FROM visits GROUP BY CUBE (day_part, direction)",
    "SELECT vehicle, trimmed_mean(dwell_s, vehicle / 10), winsorized_sd(dwell_s, share := "
    "vehicle / 10), mad_scale(dwell_s) FROM visits GROUP BY vehicle",
    "SELECT stop FROM visits GROUP BY stop HAVING mad_scale(dwell_s) > 10 "
    "ORDER BY iqr_scale(dwell_s) DESC, stop",
    "SELECT mad_scale(dwell_s), iqr_scale(dwell_s) FROM visits WHERE false",
    "SELECT route, mad_scale(dwell_s), iqr_scale(dwell_s) FROM visits WHERE visit < 4 GROUP BY 1",
    "SELECT CASE WHEN route = 'R1' THEN trimmed_mean(dwell_s, 0.4) ELSE mad_scale(dwell_s) END "
    "FROM visits GROUP BY route",
    "SELECT (SELECT trimmed_mean(v.dwell_s) - mad_scale(v.dwell_s) FROM visits v "
    "WHERE v.stop = s.stop) FROM (SELECT DISTINCT stop FROM visits) s",
    "WITH a AS (SELECT stop, mad_scale(dwell_s), iqr_scale(dwell_s) FROM visits GROUP BY ALL) "
    'SELECT max("mad_scale(dwell_s)"), min("iqr_scale(dwell_s)") FROM a',
    "SELECT * FROM (SELECT stop, trimmed_mean(dwell_s), mad_scale(dwell_s) FROM visits GROUP BY 1) "
    "JOIN (SELECT stop, mad_scale(boardings) FROM visits GROUP BY stop) USING (stop)",
    "SELECT mad_scale(dwell_s), iqr_scale(dwell_s) FROM visits UNION ALL "
    "SELECT mad_scale(boardings), iqr_scale(boardings) FROM visits",
    "SELECT quantile_hf(dwell_s, 0.3), quantile_hf(dwell_s, 0.3, 6), trimmed_mean(dwell_s), "
    "quantile_hf(dwell_s, prob := 0.9, kind := 1) FROM visits GROUP BY stop",
    "SELECT rank() OVER (ORDER BY mad_scale(dwell_s)), iqr_scale(dwell_s) FROM visits "
    "GROUP BY stop",
    "SELECT visit, mad_scale(dwell_s) OVER (PARTITION BY route), trimmed_mean(dwell_s, 0.1) OVER "
    "(PARTITION BY route, ramp_used), max(dwell_s) OVER (PARTITION BY day) FROM visits",
    "SELECT *, mad_scale(dwell_s) OVER (PARTITION BY day_part) AS m, m * 2 AS n FROM visits",
    "SELECT * EXCLUDE (stop), mad_scale(dwell_s) OVER (PARTITION BY day_part) FROM visits",
    "SELECT v.*, mad_scale(p.dwell_s) OVER (PARTITION BY v.stop) FROM visits v, peak p "
    "WHERE v.visit = p.visit + 1 AND (v.visit < 50 OR v.visit > 200)",
    "SELECT COLUMNS('boardings|alightings'), mad_scale(dwell_s) OVER w FROM visits "
    "WINDOW w AS (PARTITION BY vehicle)",
    "SELECT v.visit, mad_scale(p.dwell_s) OVER (PARTITION BY v.stop) FROM visits v "
    "LEFT JOIN peak p USING (visit)",
    "SELECT mad_scale(dwell_s) OVER (PARTITION BY route) FROM first_hundred",
    "WITH a AS (SELECT route, stop, avg(dwell_s) AS d FROM visits GROUP BY ALL) "
    "SELECT route, round(d - trimmed_mean(d) OVER (PARTITION BY route), 9) FROM a AS b",
    "SELECT v.visit, mad_scale(v.dwell_s) OVER (PARTITION BY v.stop) FROM "
    "(SELECT * FROM visits ORDER BY visit LIMIT 60) v JOIN peak USING (visit)",
    "FROM visits SELECT stop, mad_scale(dwell_s) OVER (PARTITION BY stop) ORDER BY ALL LIMIT 9",
    "FROM visits QUALIFY dwell_s > 3 * mad_scale(dwell_s) OVER (PARTITION BY route)",
    "SELECT visit FROM visits UNION SELECT mad_scale(visit) OVER () FROM peak",
    "SELECT t.route, s.m FROM (SELECT DISTINCT route FROM visits) t, LATERAL (SELECT max(mm) AS m "
    "FROM (SELECT mad_scale(dwell_s) OVER (PARTITION BY stop) AS mm FROM visits v "
    "WHERE v.route = t.route)) s",
    "SELECT DISTINCT ON (route) route, mad_scale(dwell_s) OVER (PARTITION BY route) FROM visits "
    "ORDER BY route, visit",
    "SELECT l_moments(dwell_s) OVER (PARTITION BY route) AS l FROM visits",
    "SELECT weighted_median(dwell_s, boardings) OVER (PARTITION BY stop) FROM visits",
    "SELECT stop, sum(m) FROM (SELECT stop, mad_scale(dwell_s) OVER (PARTITION BY stop, day_part) "
    "AS m FROM visits) GROUP BY stop HAVING trimmed_mean(m) > 0 AND mad_scale(m) >= 0",
    "SELECT visit FROM visits WHERE stop IN (SELECT stop FROM (SELECT stop, mad_scale(dwell_s) "
    "OVER (PARTITION BY stop) AS m FROM visits) WHERE m > 10)",
    "WITH RECURSIVE r AS (SELECT 1 AS i UNION ALL SELECT i + 1 FROM r WHERE i < 3) "
    "SELECT i, mad_scale(dwell_s) OVER (PARTITION BY stop) FROM r, visits",
    "SELECT mad_scale(v) OVER (PARTITION BY k) FROM (VALUES ('nan'::DOUBLE, 1.0), ('nan', 4), "
    "(0.0, 2), (-0.0, 3), (NULL, 8), (NULL, 9)) t(k, v)",
    "SELECT mad_scale(v) OVER (PARTITION BY {'a': k, 'b': [k]}) FROM (VALUES (1, 1.0), (1, 4), "
    "(NULL, 2), (NULL, 9)) t(k, v)",
]


@pytest.fixture
def run(connection: duckdb.DuckDBPyConnection) -> Callable[[str], tuple[list[str], Rows]]:
    def ask(sql: str) -> tuple[list[str], Rows]:
        result = connection.execute(sql)
        names = [column[0] for column in result.description or ()]
        return names, sorted(result.fetchall(), key=repr)

    return ask


def alike(left: Any, right: Any) -> bool:
    """Equal to the bit, NaN to NaN."""
    if isinstance(left, float) and isinstance(right, float):
        return left == right or (math.isnan(left) and math.isnan(right))
    if isinstance(left, tuple | list) and isinstance(right, tuple | list):
        return len(left) == len(right) and all(map(alike, left, right))
    return bool(left == right)


@pytest.mark.parametrize(("sql", "means"), BY_DEFINITION.values(), ids=BY_DEFINITION.keys())
def test_what_a_clause_means(
    connection: duckdb.DuckDBPyConnection,
    run: Callable[[str], tuple[list[str], Rows]],
    sql: str,
    means: str,
) -> None:
    expected = run(means)[1]
    for faster in (True, False):
        assert alike(run(rewrite(connection, sql, functions(), faster=faster).text)[1], expected)


@pytest.mark.parametrize("sql", FASTER)
def test_faster_rules_change_nothing(
    connection: duckdb.DuckDBPyConnection,
    run: Callable[[str], tuple[list[str], Rows]],
    sql: str,
) -> None:
    rewritten = rewrite(connection, sql, functions())
    slow = rewrite(connection, sql, functions(), faster=False)
    names, rows = run(rewritten.text)
    assert rewritten.text != sql
    assert (names, True) == (run(slow.text)[0], alike(rows, run(slow.text)[1]))


@pytest.mark.parametrize(
    "sql",
    [
        "SELECT {f}(dwell_s) FILTER (WHERE ramp_used AND stop IN ('a', 'b')), {f}(DISTINCT visit)",
        "SELECT {f}(dwell_s) OVER (PARTITION BY route), 2 + {f}(v.dwell_s) OVER w",
        "SELECT *, ({f}(visit) OVER ())::INT, {f}(visit) OVER (ORDER BY day ROWS 3 PRECEDING)",
        "SELECT round({f}(dwell_s) OVER (), 1), {f}(dwell_s) OVER () > ALL (SELECT 3)",
    ],
)
def test_columns_are_named_as_those_of_the_engines_own_functions(
    connection: duckdb.DuckDBPyConnection, sql: str
) -> None:
    sql += " FROM visits v" + (
        " WINDOW w AS (PARTITION BY stop ORDER BY day)" if "w" in sql else ""
    )
    ours = rewrite(connection, sql.format(f="mad_scale"), functions()).text
    names = [row[0] for row in connection.execute(f"DESCRIBE {ours}").fetchall()]
    engines = connection.execute(f"DESCRIBE {sql.format(f='median')}").fetchall()
    assert names == [row[0].replace("median", "mad_scale") for row in engines]


FRAMES: Final = [
    ("PARTITION BY stop ORDER BY visit", lambda a, b: a[1] == b[1] and b[0] <= a[0]),
    ("ORDER BY visit ROWS 4 PRECEDING", lambda a, b: a[0] - 4 <= b[0] <= a[0]),
    (
        "ORDER BY visit ROWS BETWEEN 2 PRECEDING AND 3 FOLLOWING EXCLUDE CURRENT ROW",
        lambda a, b: a[0] - 2 <= b[0] <= a[0] + 3 and b[0] != a[0],
    ),
    ("PARTITION BY stop", lambda a, b: a[1] == b[1]),
]


@pytest.mark.parametrize(("frame", "holds"), FRAMES, ids=[frame for frame, _ in FRAMES])
@pytest.mark.parametrize(
    ("call", "keep"),
    [
        ("mad_scale(dwell_s)", lambda _: True),
        ("trimmed_mean(dwell_s, 0.2) FILTER (WHERE visit % 3 > 0)", lambda row: row[0] % 3 > 0),
        ("trimmed_mean(dwell_s, 0.2) FILTER (WHERE random() < 2)", lambda _: True),
    ],
)
def test_windows_against_frames_gathered_by_hand(
    connection: duckdb.DuckDBPyConnection,
    frame: str,
    holds: Callable[[Any, Any], bool],
    call: str,
    keep: Callable[[Any], bool],
) -> None:
    rows = connection.execute(
        "SELECT visit, stop, dwell_s FROM visits WHERE visit < 60 ORDER BY visit"
    ).fetchall()
    expected = []
    plain = call.split(" FILTER")[0]
    for row in rows:
        values = [b[2] for b in rows if holds(row, b) and keep(b)]
        ((value,),) = connection.execute(
            f"SELECT {plain} FROM (SELECT unnest($v::DOUBLE[]) AS dwell_s)", {"v": values}
        ).fetchall()
        expected.append(value)
    sql = f"SELECT {call} OVER ({frame}) FROM visits WHERE visit < 60 ORDER BY visit"
    for faster in (True, False):
        text = rewrite(connection, sql, functions(), faster=faster).text
        assert [row[0] for row in connection.execute(text).fetchall()] == expected


def test_a_condition_that_draws_at_random_is_drawn_once_a_row(
    connection: duckdb.DuckDBPyConnection,
) -> None:
    text = rewrite(
        connection,
        "SELECT trimmed_mean(x, 0) FILTER (WHERE random() < 0.5), "
        "trimmed_mean(DISTINCT x, 0) FILTER (WHERE random() < 0.5) FROM range(20000) r(x)",
        functions(),
    ).text
    ((all_values, distinct_values),) = connection.execute(text).fetchall()
    # Half of the values 0 ... 19,999: the standard error of their mean is below 60.
    assert abs(all_values - 9999.5) < 600
    assert abs(distinct_values - 9999.5) < 600


def test_rows_drawn_at_random_are_drawn_once(connection: duckdb.DuckDBPyConnection) -> None:
    sql = (
        "SELECT r - trimmed_mean(r) OVER (PARTITION BY r) AS d FROM "
        "(SELECT random() AS r FROM range(500))"
    )
    text = rewrite(connection, sql, functions()).text
    assert "MATERIALIZED" in text
    assert connection.execute(f"SELECT count(*), max(abs(d)) FROM ({text})").fetchall() == [
        (500, 0.0)
    ]
