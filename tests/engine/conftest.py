"""A small table of visits, on a connection that has our functions."""

from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any, Final

import duckdb
import pytest

from midspread.engine.session import Session
from midspread.udfs import register

VISITS: Final = """
    CREATE OR REPLACE TABLE visits AS
    SELECT i AS visit,
           DATE '2031-01-01' + (i // 20)::INT AS day,
           ['early', 'peak', 'evening'][1 + i % 3] AS day_part,
           CASE WHEN i % 11 = 0 THEN NULL ELSE 'R' || (i % 4) END AS route,
           ['in', 'Süd'][1 + i % 2] AS direction,
           'stop ' || (hash(i) % 9) AS stop,
           i % 5 AS vehicle,
           (hash(i + 1) % 6)::INT AS boardings,
           (hash(i + 2) % 4)::INT AS alightings,
           hash(i + 3) % 4 = 0 AS ramp_used,
           ['cash box', 'tap reader'][1 + i % 2] AS payment,
           CASE WHEN i % 17 = 0 THEN NULL ELSE (hash(i + 4) % 400) / 8.0 + i % 7 END::DOUBLE
               AS dwell_s
    FROM range(240) AS rows(i)
"""

Rows = list[tuple[Any, ...]]


@pytest.fixture(scope="session")
def connection() -> Iterator[duckdb.DuckDBPyConnection]:
    """A connection with our functions and the visits."""
    with duckdb.connect(config={"python_enable_replacements": False, "threads": 2}) as made:
        register(made)
        made.execute("CREATE OR REPLACE TEMP MACRO _number(v DOUBLE) AS v")
        made.execute(VISITS)
        made.execute("CREATE VIEW peak AS SELECT * FROM visits WHERE day_part = 'peak'")
        made.execute("CREATE VIEW first_hundred AS SELECT * FROM visits LIMIT 100")
        yield made


@pytest.fixture
def rows(connection: duckdb.DuckDBPyConnection) -> Callable[[str], Rows]:
    """Runs SQL as it is and gives its rows in an order of their own."""

    def run(sql: str) -> Rows:
        return sorted(connection.execute(sql).fetchall(), key=repr)

    return run


@pytest.fixture(scope="session")
def visits_file(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The visits as a Parquet file."""
    path = tmp_path_factory.mktemp("visits") / "visits.parquet"
    with duckdb.connect() as made:
        made.execute(VISITS)
        made.execute(f"COPY visits TO '{path}' (FORMAT parquet)")
    return path


@pytest.fixture(scope="module")
def session(visits_file: Path) -> Iterator[Session]:
    """A session without a store, in which the file is called visits."""
    with Session(use_store=False, threads=2, memory="1GB") as made:
        list(made.run(f"CREATE TEMP VIEW visits AS FROM '{visits_file}'"))
        yield made
