"""`keep`: a query and its result stored as a grid."""

import os
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING

from midspread.engine.errors import MidspreadError, UsageError
from midspread.engine.grids import ledger
from midspread.engine.grids.model import Column, ColumnKind, Grid, GridKind, checked_name
from midspread.engine.grids.publishing import publish
from midspread.engine.grids.restoring import note_undo
from midspread.engine.grids.sources import check_free
from midspread.engine.parsing import one_value
from midspread.engine.store.store import Store

if TYPE_CHECKING:
    from midspread.engine.grids.computing import Computed
    from midspread.engine.session import Session


@dataclass(frozen=True)
class Kept:
    """What `keep` did.

    Attributes
    ----------
    grid : Grid
        As it is now.
    is_key_inferred : bool
        Whether its key was taken from the query's GROUP BY.
    is_new : bool
        Whether there was no grid of the name.
    """

    grid: Grid
    is_key_inferred: bool
    is_new: bool


def keep(
    session: "Session",
    store_path: Path,
    name: str,
    sql: str,
    *,
    key: Sequence[str] | None = None,
    later: bool = False,
    replacing: bool = False,
) -> Kept:
    """Store a query and its result.

    Parameters
    ----------
    session : Session
        Computes the query.
    store_path : Path
        The store, made when it is missing.
    name : str
        Of the grid.
    sql : str
        Definitions, then one SELECT.
    key : sequence of str, optional
        The columns that tell its rows apart; by default those the query groups by.
    later : bool
        Whether to keep the query without running it.
    replacing : bool
        Whether a grid of the name may be there, whose query is then changed.

    Raises
    ------
    MidspreadError
        With one sentence; the store is as it was.
    """
    checked_name("keep", name)
    store = Store.open(store_path, memory=memory_of(session))
    with store.reading() as engine:
        before = ledger.grids(engine)
        check_free("keep", engine, name)
    old = before.get(name.casefold())
    _check_replacing(name, old, replacing)
    if later:
        session.expand(sql)  # read, guarded and rewritten, not run
        return _keep_for_later(store, name, sql, key, old)
    computed = session.materialise("keep", sql)
    _check_circle(name, computed.reads, before)
    keys, is_inferred = _keys(key, computed)
    grid = Grid(
        name=old.name if old else name,
        kind=GridKind.DERIVED,
        sql=sql,
        keys=keys,
        columns=_added_columns(old),
        version=old.version if old else 0,
        stamp=old.stamp if old else 0,
        folder=folder_of(store.path),
    )
    if old and old.of_kind(ColumnKind.ENTERED) and old.keys != keys:
        raise MidspreadError(
            f"keep: {name} has typed-in columns that follow its key ({', '.join(old.keys)}), and "
            f"the new query has another ({', '.join(keys) or 'none'}); keep the key with --key, or "
            f"drop those columns first."
        )
    try:
        with store.writing() as engine:
            now = ledger.grids(engine).get(name.casefold())
            if (now.stamp if now else None) != (old.stamp if old else None):
                raise MidspreadError(
                    f"keep: {name} was changed by another command meanwhile; look at it with "
                    f"midspread show {name}, then keep again."
                )
            if old:
                grid = replace(grid, columns=_with_derived(old, grid))
            cause = "query replaced" if old else "first kept"
            written, _ = publish(engine, "keep", now, grid, computed, cause)
    finally:
        store.close()
    return Kept(written, is_inferred, old is None)


def memory_of(session: "Session") -> str:
    """The most memory that a session takes, for the store that its result goes to."""
    with session.cursor() as connection:
        return str(one_value(connection, "SELECT current_setting('memory_limit')"))


def folder_of(store: Path) -> str:
    """The present folder as a grid records it."""
    here = Path.cwd()
    try:
        return os.path.relpath(here, store.parent)
    except ValueError:  # another drive
        return str(here)


def _with_derived(old: Grid, grid: Grid) -> tuple[Column, ...]:
    """The old grid's derived columns, so that the change can be told, before the added ones."""
    return (*old.of_kind(ColumnKind.DERIVED), *grid.columns)


def _added_columns(old: Grid | None) -> tuple[Column, ...]:
    if old is None:
        return ()
    return tuple(column for column in old.columns if column.kind is not ColumnKind.DERIVED)


def _check_replacing(name: str, old: Grid | None, replacing: bool) -> None:
    if old is None:
        return
    if old.kind is GridKind.ENTERED:
        raise MidspreadError(
            f"keep: {name} is a grid of typed-in values, which no query may replace; choose "
            f"another name."
        )
    if not replacing:
        raise MidspreadError(
            f"keep: there is a grid {old.name} already; change its query with --replace, or choose "
            f"another name."
        )


def _check_circle(name: str, reads: Sequence[str], grids: dict[str, Grid]) -> None:
    """Refuse a query that reads, directly or not, the grid it makes."""
    waiting: list[tuple[str, tuple[str, ...]]] = [
        (other.casefold(), (name, other)) for other in reads
    ]
    seen: set[str] = set()
    while waiting:
        folded, path = waiting.pop()
        if folded == name.casefold():
            raise MidspreadError(
                f"keep: {name} would rest on itself ({' → '.join(path)}); leave one of them out."
            )
        if folded in seen or folded not in grids:
            continue
        seen.add(folded)
        waiting += [(other.casefold(), (*path, other)) for other in grids[folded].reads]


def _keys(key: Sequence[str] | None, computed: "Computed") -> tuple[tuple[str, ...], bool]:
    names = {name.casefold(): name for name, _ in computed.columns}
    if key is None:
        found = tuple(names[k.casefold()] for k in computed.grouped_by if k.casefold() in names)
        return (found, True) if len(found) == len(computed.grouped_by) else ((), True)
    for one in key:
        if one.casefold() not in names:
            raise UsageError(
                f"keep: --key names {one}, which is no column of the result; it has "
                f"{', '.join(names.values())}."
            )
    return tuple(names[one.casefold()] for one in key), False


def _keep_for_later(
    store: Store, name: str, sql: str, key: Sequence[str] | None, old: Grid | None
) -> Kept:
    if old is not None and old.version > 0:
        raise UsageError(
            f"keep: --later is for a grid that has no contents yet, and {old.name} has; leave "
            f"--later out."
        )
    grid = Grid(
        name=old.name if old else name,
        kind=GridKind.DERIVED,
        sql=sql,
        keys=tuple(key or ()),
        folder=folder_of(store.path),
    )
    try:
        with store.writing() as engine:
            stamp = ledger.next_stamp(engine)
            note_undo(engine, stamp, grid.name, old)
            ledger.write_grid(engine, grid)
            ledger.log(engine, stamp, grid.name, "keep", note="kept for later")
    finally:
        store.close()
    return Kept(grid, key is None, old is None)
