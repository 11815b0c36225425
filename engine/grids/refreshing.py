"""`refresh`: what is stale is computed again, in the order in which it rests on one another."""

import contextlib
import os
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING

from midspread.engine.errors import Interrupted, MidspreadError
from midspread.engine.grids import ledger
from midspread.engine.grids.freshness import (
    Freshness,
    State,
    freshness_of_all,
    in_order,
    reasons,
)
from midspread.engine.grids.keeping import memory_of
from midspread.engine.grids.model import Grid
from midspread.engine.grids.publishing import publish
from midspread.engine.store.store import Store
from midspread.udfs import functions

if TYPE_CHECKING:
    from midspread.engine.session import Session


@dataclass(frozen=True)
class Refreshed:
    """What became of one grid.

    Attributes
    ----------
    grid : Grid
        As it is now.
    why : tuple of str
        What had made it stale.
    is_changed : bool
        Whether its contents are others than before.
    is_skipped : bool
        Whether it was left as it is because a grid it reads failed.
    failure : str
        Why it could not be computed, or the grid that failed; empty when it could.
    """

    grid: Grid
    why: tuple[str, ...]
    is_changed: bool = False
    is_skipped: bool = False
    failure: str = ""


def plan(
    grids: Mapping[str, Grid], states: Mapping[str, Freshness], names: Sequence[str] = ()
) -> list[Grid]:
    """The grids to compute, in order: the stale ones among those named and all they rest on.

    Parameters
    ----------
    grids, states : mapping
        Every grid and its state, by folded name.
    names : sequence of str
        The grids wanted; all when empty.

    Raises
    ------
    MidspreadError
        When there is no grid of a name.
    """
    wanted = [ledger.named(grids, "refresh", name).folded for name in names] or None
    return [
        grids[name] for name in in_order(grids, wanted) if states[name].state is not State.FRESH
    ]


def look(session: "Session", store_path: Path) -> tuple[dict[str, Grid], dict[str, Freshness]]:
    """Every grid of a store and its state, by folded name."""
    store = Store.open(store_path, create=False)
    with store.reading() as engine:
        grids = ledger.grids(engine)
    store.close()
    with session.cursor() as connection:
        states = freshness_of_all(grids, connection, functions(), store.path.parent)
    return grids, states


def refresh(
    open_session: Callable[[], "Session"],
    store_path: Path,
    names: Sequence[str] = (),
    on_grid: Callable[[Grid, int, int], None] | None = None,
) -> Iterator[Refreshed]:
    """Compute what is stale, one grid after the other.

    A grid that fails keeps its last good contents and is marked; those that do not rest on it go
    on. Each grid is written in a transaction of its own.

    Parameters
    ----------
    open_session : callable
        Makes a session; each grid has one of its own, as its script may define things.
    store_path : Path
        The store.
    names : sequence of str
        The grids wanted; all when empty.
    on_grid : callable, optional
        Told of each grid before it is computed, its place and how many there are.

    Yields
    ------
    Refreshed
        One for each grid that was computed or failed.
    """
    with open_session() as session:
        grids, states = look(session, store_path)
        memory = memory_of(session)
    listed = plan(grids, states, names)
    failed: set[str] = set()
    for place, grid in enumerate(listed, start=1):
        if on_grid is not None:
            on_grid(grid, place, len(listed))
        broken = [other for other in grid.reads if other.casefold() in failed]
        if broken:
            failed.add(grid.folded)
            yield Refreshed(grid, states[grid.folded].why, is_skipped=True, failure=broken[0])
            continue
        made = _refresh_one(open_session, store_path, grid, bool(grid.failure), memory)
        if made is None:
            continue
        if made.failure:
            failed.add(grid.folded)
        yield made


def _refresh_one(
    open_session: Callable[[], "Session"],
    store_path: Path,
    grid: Grid,
    is_failed: bool,
    memory: str,
) -> Refreshed | None:
    """Compute one grid; None when it is fresh after all, as what it reads came out the same."""
    store = Store(store_path, memory)
    folder = Path(os.path.normpath(store.path.parent / grid.folder))
    why: tuple[str, ...] = ()
    try:
        with contextlib.chdir(folder), open_session() as session:
            with store.reading() as engine:
                grids = ledger.grids(engine)
            with session.cursor() as connection:
                found = reasons(grid, grids, connection, functions(), store.path.parent)
            why = tuple(found)
            if not (why or is_failed):
                return None
            computed = session.materialise("refresh", grid.sql)
            with store.writing() as engine:
                before = ledger.grids(engine).get(grid.folded)
                if before is None or before.sql != grid.sql:
                    return Refreshed(grid, why, failure="its query was changed meanwhile")
                wished = before
                if not before.keys and not before.version and computed.grouped_by:
                    wished = replace(before, keys=computed.grouped_by)
                cause = "; ".join(why) or "tried again"
                written, is_changed = publish(engine, "refresh", before, wished, computed, cause)
            return Refreshed(written, why, is_changed)
    except Interrupted:
        raise
    except (MidspreadError, OSError) as error:
        reason = str(error).removeprefix("query: ").removeprefix("refresh: ").rstrip(".")
        if isinstance(error, OSError):
            reason = f"the folder {folder} is gone; bring it back or keep the grid anew"
        _mark_failed(store, grid, reason)
        return Refreshed(grid, why, failure=reason)
    finally:
        store.close()


def _mark_failed(store: Store, grid: Grid, reason: str) -> None:
    with store.writing() as engine:
        engine.execute(
            "UPDATE store.ledger.grids SET failure = $1 WHERE lower(grid) = lower($2)",
            [reason, grid.name],
        )
