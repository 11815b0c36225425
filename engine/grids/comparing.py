"""`changes`: how two versions of a grid differ."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Final

import duckdb

from midspread.engine.errors import MidspreadError, UsageError
from midspread.engine.grids.ledger import found_grid
from midspread.engine.grids.model import Grid, GridKind
from midspread.engine.grids.tables import versions_joined
from midspread.engine.grids.versions import version_table
from midspread.engine.nearest import did_you_mean, nearest
from midspread.engine.store.quoting import literal, quoted
from midspread.engine.store.store import reading

if TYPE_CHECKING:
    import pyarrow as pa

_CELL: Final = (
    "STRUCT(place INTEGER, name VARCHAR, before VARCHAR, after VARCHAR,"
    " change DOUBLE, in_se DOUBLE)"
)
_FRACTIONAL: Final = ("DOUBLE", "FLOAT", "DECIMAL")


@dataclass(frozen=True)
class Changes:
    """How two versions of a grid differ.

    Attributes
    ----------
    table : pyarrow.Table
        One row a cell: the key, what happened (added, gone, changed), the column, the value before
        and after, the change, and the change in standard errors where the grid carries one: in a
        column of the same name with _se, or in one called se that follows it.
    first, last : int
        The two versions.
    count : int
        How many differences there are; the table may hold only the first and the last of them.
    """

    table: "pa.Table"
    first: int
    last: int
    count: int


def changes(
    store_path: Path,
    name: str,
    before: int | None = None,
    after: int | None = None,
    *,
    columns: Sequence[str] = (),
    ends: tuple[int, int] | None = None,
    memory: str | None = None,
) -> Changes:
    """How two versions of a grid differ, by key.

    Parameters
    ----------
    store_path : Path
        The store.
    name : str
        Of the grid, which must have a key.
    before, after : int, optional
        The versions; by default the last one before the present, and the present.
    columns : sequence of str
        Only changes of these columns; of all when empty. Rows added and gone are always told.
    ends : tuple of (int, int), optional
        How many of the first and of the last differences are wanted, where there are more.
    memory : str, optional
        Most memory to take.
    """
    with reading(store_path, memory=memory) as engine:
        grid = found_grid(engine, "changes", name)
        if grid.kind is GridKind.ENTERED:
            version_table(engine, "changes", grid, 0)
        if not grid.keys:
            raise MidspreadError(
                f"changes: {grid.name} has no key, so its rows cannot be told apart; name one "
                f"with midspread keep {grid.name} --replace --key."
            )
        last = grid.version if after is None else after
        first = last - 1 if before is None else before
        if first < 1 or last < 1:
            raise UsageError(
                f"changes: {grid.name} has only version {grid.version}; there is something to "
                f"compare once a refresh has changed it."
            )
        old = version_table(engine, "changes", grid, first)
        new = version_table(engine, "changes", grid, last)
        query = _changes_query(engine, grid, old, new, _of_grid(grid, columns))
        engine.execute(f"CREATE OR REPLACE TEMP TABLE _m_changes AS {query}")
        count = engine.execute("SELECT count(*) FROM temp.main._m_changes").fetchall()[0][0]
        some = ""
        if ends is not None and count > sum(ends):
            some = f" WHERE rowid < {ends[0]} OR rowid >= {count - ends[1]}"
        table = engine.sql(f"FROM temp.main._m_changes{some} ORDER BY rowid").to_arrow_table()
    return Changes(table, first, last, count)


def _of_grid(grid: Grid, names: Sequence[str]) -> frozenset[str]:
    """The columns of some names as the grid spells them; of all when there are none."""
    for name in names:
        if grid.column(name) is None:
            there = [column.name for column in grid.columns]
            hint = did_you_mean(nearest(name, there), f"it has {', '.join(there)}.")
            raise UsageError(f"changes: {grid.name} has no column {name}; {hint}")
    wanted = {name.casefold() for name in names}
    return frozenset(
        column.name for column in grid.columns if not names or column.name.casefold() in wanted
    )


def _changes_query(
    engine: duckdb.DuckDBPyConnection, grid: Grid, old: str, new: str, only: frozenset[str]
) -> str:
    """One join of the two versions; a row of it becomes one for each of its cells that differ."""
    kinds = {str(row[0]): str(row[1]) for row in engine.execute(f"DESCRIBE {new}").fetchall()}
    before = {str(row[0]) for row in engine.execute(f"DESCRIBE {old}").fetchall()}
    shared = {
        name: kind for name, kind in kinds.items() if name in before and name not in grid.keys
    }
    keys = ", ".join(f"coalesce(_n.{quoted(k)}, _o.{quoted(k)}) AS {quoted(k)}" for k in grid.keys)
    listed = ", ".join(quoted(key) for key in grid.keys)
    cells = [_cell(place, name, shared) for place, name in enumerate(shared) if name in only] or [
        "NULL"
    ]
    return (
        f'SELECT {listed}, _m_what AS what, _m_cell.name AS "column", _m_cell.before,'
        f" _m_cell.after, _m_cell.change, _m_cell.in_se FROM (SELECT {listed}, _m_what,"
        f" unnest(CASE WHEN _m_what = 'changed' THEN _m_cells ELSE [NULL] END) AS _m_cell FROM"
        f" (SELECT {keys}, CASE WHEN _o._m_there IS NULL THEN 'added' WHEN _n._m_there IS NULL"
        f" THEN 'gone' ELSE 'changed' END AS _m_what,"
        f" CAST([{', '.join(cells)}] AS {_CELL}[]) AS _m_cells"
        f" FROM {versions_joined(old, new, grid.keys)}))"
        f" WHERE _m_what <> 'changed' OR _m_cell IS NOT NULL"
        f" ORDER BY {listed}, _m_what, _m_cell.place"
    )


def _cell(place: int, name: str, kinds: Mapping[str, str]) -> str:
    """What is told of a column where it differs; NULL where it does not."""
    column = quoted(name)
    change = in_se = "NULL"
    if _is_number(kinds[name]):
        change = f"CAST(_n.{column} AS DOUBLE) - CAST(_o.{column} AS DOUBLE)"
        se = _standard_error(name, kinds)
        if se:
            squares = " + ".join(f"CAST({v}.{quoted(se)} AS DOUBLE) ** 2" for v in ("_o", "_n"))
            in_se = f"({change}) / nullif(sqrt({squares}), 0)"
    return (
        f"CASE WHEN _o.{column} IS DISTINCT FROM _n.{column} THEN {{'place': {place},"
        f" 'name': {literal(name)}, 'before': CAST(_o.{column} AS VARCHAR),"
        f" 'after': CAST(_n.{column} AS VARCHAR), 'change': CAST({change} AS DOUBLE),"
        f" 'in_se': CAST({in_se} AS DOUBLE)}} END"
    )


def _is_number(kind: str) -> bool:
    upper = kind.upper()
    is_whole = upper.endswith("INT") or upper in ("INTEGER", "UINTEGER")
    return is_whole or (upper.startswith(_FRACTIONAL) and "[" not in upper)


def _standard_error(name: str, kinds: Mapping[str, str]) -> str:
    """The column that holds a column's standard error; empty when there is none.

    That is the one of its name with _se; a plain se belongs to the last column of fractions before
    it.
    """
    lower = {one.casefold(): one for one in kinds}
    own = lower.get(f"{name.casefold()}_se")
    if own or "se" not in lower:
        return own or ""
    names = list(kinds)
    before = [
        one
        for one in names[: names.index(lower["se"])]
        if kinds[one].upper().startswith(_FRACTIONAL) and not one.casefold().endswith("_se")
    ]
    return lower["se"] if before and before[-1] == name else ""
