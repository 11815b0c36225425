"""A small network for the tests of table functions."""

from collections.abc import Iterator

import duckdb
import pytest

from midspread.udfs import register


@pytest.fixture(scope="module")
def larkmoor(tmp_path_factory: pytest.TempPathFactory) -> Iterator[duckdb.DuckDBPyConnection]:
    """Visits of Larkmoor Transit as a table, a view, files and a table of an attached database."""
    folder = tmp_path_factory.mktemp("larkmoor")
    with duckdb.connect() as connection:
        register(connection)
        connection.execute(f"SET file_search_path = '{folder}'")
        connection.execute(
            """CREATE TABLE visits AS SELECT i AS visit, 'R' || (i % 3) AS route,
                CASE WHEN i % 5 > 0 THEN 'stop ' || (i % 4) END AS stop,
                i % 2 = 0 AS ramp_used, DATE '2030-01-01' + CAST(i // 40 AS INTEGER) AS day,
                CASE WHEN i % 11 > 0 THEN 10 + (i * i) % 37 + 0.25 END::DOUBLE AS dwell_s
            FROM range(200) t(i)"""
        )
        connection.execute("CREATE VIEW viewed AS FROM visits")
        connection.execute(f"ATTACH '{folder / 'extract.duckdb'}' AS warehouse")
        connection.execute('CREATE SCHEMA warehouse."bus depot"')
        for name in ("warehouse.visits", 'warehouse."bus depot"."Straßen & visits"'):
            connection.execute(f"CREATE TABLE {name} AS FROM visits")
        connection.execute('CREATE TABLE "my visits" AS FROM visits')
        for ending in ("parquet", "csv"):
            connection.execute(f"COPY visits TO '{folder / f'all.{ending}'}'")
        connection.execute(f"COPY visits TO '{folder / 'two words.parquet'}'")
        for part in range(2):
            connection.execute(
                f"COPY (FROM visits WHERE visit % 2 = {part}) "
                f"TO '{folder / f'part-{part}.parquet'}'"
            )
        connection.execute("CREATE TABLE folder AS SELECT ? AS path", [str(folder)])
        yield connection
