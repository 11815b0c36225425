"""Values typed into derived grids whose rows are gone for now."""

import duckdb

from midspread.engine.grids import ledger
from midspread.engine.grids.model import ColumnKind, Grid, GridKind
from midspread.engine.grids.tables import key_text


def set_aside(engine: duckdb.DuckDBPyConnection, grid: Grid) -> list[tuple[str, str, str | None]]:
    """Key, column and value of each entry whose row the grid does not have at present."""
    if grid.kind is not GridKind.DERIVED or not grid.of_kind(ColumnKind.ENTERED):
        return []
    return [
        (str(key), str(name), value)
        for key, name, value in engine.execute(
            "SELECT key, name, value FROM store.ledger.entries WHERE lower(grid) = lower($1)"
            f" AND key NOT IN (SELECT {key_text(grid.keys)} FROM {ledger.contents(grid.name)})"
            " ORDER BY ALL",
            [grid.name],
        ).fetchall()
    ]
