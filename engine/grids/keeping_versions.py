"""How many earlier versions of each grid a store keeps, and letting go of those beyond."""

from pathlib import Path
from typing import Final

import duckdb

from midspread.engine.grids import ledger
from midspread.engine.store.store import writing

VERSIONS_SETTING: Final = "versions_kept"
DEFAULT_VERSIONS: Final = 10


def drop_versions(engine: duckdb.DuckDBPyConnection, name: str, last: int) -> int:
    """Drop the versions of a grid up to one; how many there were."""
    versions = engine.execute(
        "SELECT version FROM store.ledger.versions WHERE lower(grid) = lower($1) AND is_kept"
        " AND version <= $2",
        [name, last],
    ).fetchall()
    for (version,) in versions:
        engine.execute(f"DROP TABLE IF EXISTS {ledger.earlier(name, version)}")
        engine.execute(
            "UPDATE store.ledger.versions SET is_kept = false"
            " WHERE lower(grid) = lower($1) AND version = $2",
            [name, version],
        )
    return len(versions)


def keep_versions(store_path: Path, count: int) -> int:
    """Set how many earlier versions of each grid a store keeps; how many it lets go of for that."""
    with writing(store_path) as engine:
        engine.execute("DELETE FROM store.ledger.about WHERE name = $1", [VERSIONS_SETTING])
        engine.execute(
            "INSERT INTO store.ledger.about VALUES ($1, $2)", [VERSIONS_SETTING, str(count)]
        )
        return sum(
            drop_versions(engine, grid.name, grid.version - 1 - count)
            for grid in ledger.grids(engine).values()
        )


def versions_kept(engine: duckdb.DuckDBPyConnection) -> int:
    """How many earlier versions of each grid the store keeps."""
    rows = engine.execute(
        "SELECT value FROM store.ledger.about WHERE name = $1", [VERSIONS_SETTING]
    ).fetchall()
    return int(rows[0][0]) if rows else DEFAULT_VERSIONS
