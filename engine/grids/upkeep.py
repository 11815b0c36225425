"""Whether the grids of a store are sound, and letting go of what nobody can bring back."""

import duckdb

from midspread.engine.grids import ledger
from midspread.engine.grids.tables import key_text
from midspread.engine.store.quoting import quoted


def faults_of_grids(engine: duckdb.DuckDBPyConnection) -> list[str]:
    """What is wrong with the grids, one sentence each; within `Store.reading`."""
    faults: list[str] = []
    grids = ledger.grids(engine)
    present = _tables(engine, "main")
    for grid in grids.values():
        if grid.version == 0:
            continue
        if grid.name not in present:
            faults.append(f"Grid {grid.name} has lost its rows.")
            continue
        table = ledger.contents(grid.name)
        rows = engine.execute(f"SELECT count(*) FROM {table}").fetchall()[0][0]
        if rows != grid.rows:
            faults.append(f"Grid {grid.name} has {rows} rows where {grid.rows} were noted.")
        described = [str(row[0]) for row in engine.execute(f"DESCRIBE {table}").fetchall()]
        if described != [column.name for column in grid.columns]:
            faults.append(f"Grid {grid.name} has other columns than were noted.")
        elif grid.keys and _has_double_keys(engine, table, grid.keys):
            faults.append(f"Grid {grid.name} has a key more than once.")
    for name, version in engine.execute(
        "SELECT v.grid, v.version FROM store.ledger.versions AS v JOIN store.ledger.grids AS g"
        " ON lower(g.grid) = lower(v.grid) WHERE v.is_kept AND v.version < g.version ORDER BY ALL"
    ).fetchall():
        if f"{name} {version}" not in _tables(engine, "earlier"):
            faults.append(f"Version {version} of grid {name} has lost its rows.")
    return faults


def remarks_on_grids(engine: duckdb.DuckDBPyConnection) -> list[str]:
    """What else lies in the store beside its grids, one sentence each; within `Store.reading`."""
    own = {grid.name for grid in ledger.grids(engine).values()}
    remarks = [
        f"The table {name} was made by another program and is left alone."
        for name in sorted(_tables(engine, "main") - own)
    ]
    spare = len(_tables(engine, "aside")) + len(_orphans(engine))
    if spare:
        remarks.append(
            f"{spare} tables are kept for midspread undo; midspread store pack lets go of them."
            if spare > 1
            else "1 table is kept for midspread undo; midspread store pack lets go of it."
        )
    return remarks


def let_go(engine: duckdb.DuckDBPyConnection) -> None:
    """Drop what `undo` could bring back, and versions of grids that are gone; within `writing`."""
    for name in _tables(engine, "aside"):
        engine.execute(f"DROP TABLE store.aside.{quoted(name)}")
    engine.execute("DELETE FROM store.ledger.undo")
    for name in _orphans(engine):
        engine.execute(f"DROP TABLE store.earlier.{quoted(name)}")


def _orphans(engine: duckdb.DuckDBPyConnection) -> set[str]:
    """Tables of earlier versions that no grid has at present."""
    kept = engine.execute("SELECT grid, version FROM store.ledger.versions WHERE is_kept")
    return _tables(engine, "earlier") - {f"{name} {version}" for name, version in kept.fetchall()}


def _tables(engine: duckdb.DuckDBPyConnection, schema: str) -> set[str]:
    rows = engine.execute(
        "SELECT table_name FROM duckdb_tables() WHERE database_name = 'store' AND schema_name = $1",
        [schema],
    ).fetchall()
    return {str(name) for (name,) in rows}


def _has_double_keys(engine: duckdb.DuckDBPyConnection, table: str, keys: tuple[str, ...]) -> bool:
    rows = engine.execute(
        f"SELECT count(*) > count(DISTINCT {key_text(keys)}) FROM {table}"
    ).fetchall()
    return bool(rows[0][0])
