"""Bringing a store of an older format up to date, once a copy of it is kept."""

import secrets
from pathlib import Path

import duckdb

from midspread.engine.store.layout import ALIAS, FORMAT, creating_grids
from midspread.engine.store.quoting import quoted


def copy_beside(path: Path, found: int) -> Path:
    """Where the copy of a store of an older format is kept."""
    plain = path.with_name(f"{path.name}.format{found}")
    return plain if not plain.exists() else plain.with_name(f"{plain.name}.{secrets.token_hex(4)}")


def upgrade(engine: duckdb.DuckDBPyConnection, found: int) -> None:
    """Change the attached store from an older format to the present one, in one transaction."""
    engine.execute("BEGIN")
    if found < 2:
        for statement in creating_grids(ALIAS):
            engine.execute(statement)
    engine.execute(
        f"UPDATE {quoted(ALIAS)}.ledger.about SET value = $1 WHERE name = 'format'", [str(FORMAT)]
    )
    engine.execute("COMMIT")
