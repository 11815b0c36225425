"""The SQL that makes a grid's table: derived columns, entered ones beside them, computed ones."""

from collections.abc import Sequence
from graphlib import CycleError, TopologicalSorter

import duckdb

from midspread.engine.errors import MidspreadError
from midspread.engine.grids import ledger
from midspread.engine.grids.model import Column, ColumnKind, Grid, GridKind
from midspread.engine.inputs.called import named_in
from midspread.engine.inputs.scanning import mentions_of
from midspread.engine.store.quoting import literal, quoted


def key_text(keys: Sequence[str], source: str = "") -> str:
    """An expression for a row's key: a JSON list of its values as text."""
    before = f"{quoted(source)}." if source else ""
    listed = ", ".join(f"CAST({before}{quoted(key)} AS VARCHAR)" for key in keys)
    return f"CAST(to_json([{listed}]) AS VARCHAR)"


def versions_joined(old: str, new: str, keys: Sequence[str]) -> str:
    """Two queries or tables of a grid's rows as _o and _n, joined by key.

    _m_there is NULL on the side that lacks the row.
    """
    on = " AND ".join(f"_o.{quoted(k)} IS NOT DISTINCT FROM _n.{quoted(k)}" for k in keys)
    return (
        f"(SELECT *, true AS _m_there FROM {old}) AS _o"
        f" FULL JOIN (SELECT *, true AS _m_there FROM {new}) AS _n ON {on}"
    )


def contents_query(grid: Grid, base: str) -> str:
    """A query for all of a grid's columns over a table that holds its own.

    Parameters
    ----------
    grid : Grid
        Its columns and keys.
    base : str
        For a derived grid, a table with the columns of its query; for an entered one, a table with
        its entered columns. As SQL.

    Returns
    -------
    str
        The columns in the grid's order.
    """
    added = grid.of_kind(ColumnKind.ENTERED) if grid.kind is GridKind.DERIVED else []
    inner = f"SELECT _m_base.* FROM {base} AS _m_base"
    if added:
        joins = []
        values = []
        for place, column in enumerate(added):
            entries = f"_m_entries_{place}"
            joins.append(
                f"LEFT JOIN (SELECT key, value FROM store.ledger.entries"
                f" WHERE lower(grid) = {literal(grid.name.lower())}"
                f" AND lower(name) = {literal(column.name.lower())}) AS {entries}"
                f" ON {entries}.key = {key_text(grid.keys, '_m_base')}"
            )
            values.append(f"CAST({entries}.value AS {column.type}) AS {quoted(column.name)}")
        inner = f"SELECT _m_base.*, {', '.join(values)} FROM {base} AS _m_base {' '.join(joins)}"
    for column in computed_in_order(grid):
        inner = f"SELECT *, ({column.expression}) AS {quoted(column.name)} FROM ({inner})"
    listed = ", ".join(
        quoted(column.name)
        if column.kind is ColumnKind.DERIVED
        else f"CAST({quoted(column.name)} AS {column.type}) AS {quoted(column.name)}"
        for column in grid.columns
    )
    return f"SELECT {listed} FROM ({inner})"


def computed_in_order(grid: Grid) -> list[Column]:
    """The computed columns, each after those it rests on.

    Raises
    ------
    MidspreadError
        When they rest on one another in a circle, with its path.
    """
    computed = {column.name.casefold(): column for column in grid.of_kind(ColumnKind.COMPUTED)}
    rests_on = {
        name: sorted(mentions_of(column.expression).names & computed.keys())
        for name, column in computed.items()
    }
    try:
        order = list(TopologicalSorter(rests_on).static_order())
    except CycleError as error:
        path = " → ".join(computed[name].name for name in reversed(error.args[1]))
        raise MidspreadError(
            f"column: the columns of {grid.name} rest on one another in a circle ({path}); "
            f"write one of them without the other."
        ) from None
    return [computed[name] for name in order]


def computing_steps(engine: duckdb.DuckDBPyConnection, grid: Grid) -> list[str]:
    """Statements that compute the computed columns of all rows; a WHERE may follow."""
    ordered = computed_in_order(grid)
    if ordered:
        equip(engine, grid)
    return [
        f"UPDATE {ledger.contents(grid.name)} SET {quoted(column.name)} = ({column.expression})"
        for column in ordered
    ]


def equip(engine: duckdb.DuckDBPyConnection, grid: Grid) -> None:
    """Register our functions where a computed column of a grid calls one."""
    from midspread.udfs import functions

    called = named_in(" ".join(column.expression for column in grid.columns), functions())
    if called:
        from midspread.udfs import register

        register(engine, names=called)
