from collections.abc import Iterator

import duckdb
import pytest

from midspread.demo_db import Demo, build, create_truth_view

VISITS = 60_000


@pytest.fixture(scope="session")
def demo(tmp_path_factory: pytest.TempPathFactory) -> Demo:
    return build(tmp_path_factory.mktemp("larkmoor") / "demo", visits=VISITS, threads=2)


@pytest.fixture(scope="session")
def truth_connection(demo: Demo) -> Iterator[duckdb.DuckDBPyConnection]:
    """A connection with the table `visits`: the Parquet rows with their truth beside them."""
    with duckdb.connect(":memory:", config={"threads": 2}) as connection:
        create_truth_view(connection, demo.visits, "generated")
        connection.execute(
            "CREATE TABLE visits AS SELECT files.*, generated.clean_dwell_s, generated.fault "
            "FROM read_parquet(?) AS files JOIN generated USING (visit)",
            [demo.dwell],
        )
        connection.execute(f"ATTACH '{demo.warehouse}' AS warehouse (READ_ONLY)")
        yield connection
