"""Which columns of a result are its key."""

import duckdb
import pytest

from midspread.engine.grids.grouping import grouped_by
from midspread.udfs import register


@pytest.mark.parametrize(
    ("sql", "expected"),
    [
        ("SELECT route, count(*) FROM t GROUP BY route", ("route",)),
        ("SELECT route AS r, count(*) FROM t GROUP BY route", ("r",)),
        ("SELECT route, day, count(*) FROM t GROUP BY 1, 2", ("route", "day")),
        ("SELECT t.route, count(*) FROM t GROUP BY t.route", ("route",)),
        ("SELECT day + 1 AS next, sum(x) FROM t GROUP BY day + 1", ("next",)),
        ("SELECT route, day, mad_scale(x) AS s FROM t GROUP BY ALL", ("route", "day")),
        ("WITH q AS (FROM t) SELECT a, max(b) FROM q GROUP BY a ORDER BY 2 LIMIT 3", ("a",)),
        ("FROM robust_summary('t', 'x', by := ['route', 'day'])", ("route", "day")),
        ("FROM robust_summary('t', 'x', by := 'route')", ("route",)),
        ("FROM robust_summary('t', 'x')", ()),
        ("SELECT max(b) FROM t GROUP BY a", ()),
        ("SELECT a, max(b) FROM t GROUP BY ROLLUP (a)", ()),
        ("SELECT a FROM t", ()),
        ("SELECT 1 UNION SELECT 2", ()),
    ],
)
def test_the_columns_grouped_by(sql: str, expected: tuple[str, ...]) -> None:
    with duckdb.connect() as connection:
        register(connection)
        assert grouped_by(connection, sql) == expected
