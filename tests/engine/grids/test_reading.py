"""Which tables a script reads."""

import duckdb
import pytest

from midspread.engine.grids.reading import tables_read
from midspread.engine.statements import split


@pytest.mark.parametrize(
    ("script", "expected"),
    [
        ("SELECT top FROM sums AS other", {"sums"}),
        ("SELECT max(m) AS top FROM Sums", {"sums"}),
        ("WITH limits AS (SELECT 1 AS a) SELECT a FROM limits", set()),
        ("WITH limits AS (FROM limits) SELECT a FROM limits", {"limits"}),
        ("SELECT (SELECT max(a) FROM inner_one) FROM outer_one", {"inner_one", "outer_one"}),
        ("FROM a JOIN b USING (k) WHERE k IN (SELECT k FROM c)", {"a", "b", "c"}),
        ("FROM 'dwell.parquet'", {"dwell.parquet"}),
        ("FROM warehouse.routes", set()),
        ("FROM robust_summary('sums', 'x', by := 'k')", {"sums"}),
        ("FROM robust_summary('(SELECT * FROM sums JOIN t2 USING (k))', 'x')", {"sums", "t2"}),
        ("FROM query('SELECT * FROM sums')", {"sums"}),
        ("CREATE TEMP VIEW v AS FROM sums; SELECT 1 FROM v", {"sums", "v"}),
        ("FROM a UNION ALL FROM b", {"a", "b"}),
        ("PIVOT sums ON k USING max(x)", {"sums"}),
    ],
)
def test_the_tables(script: str, expected: set[str]) -> None:
    with duckdb.connect() as connection:
        statements = split(connection, script)
        assert tables_read(connection, statements, ("robust_summary",)) == expected
