"""What the store notes of pushes: the intent before, the confirmation after.

One transaction writes one database, so that the store and the target cannot change together. A
push that was begun and never confirmed may or may not have arrived; it is named until a later push
to the same table is confirmed.
"""

from typing import Final

import duckdb

from midspread.engine.grids import ledger
from midspread.engine.grids.freshness import clock
from midspread.engine.grids.ledger import moment
from midspread.engine.pushing.target import Mode, Outcome, Place
from midspread.engine.store.store import Store

BEGUN: Final = "push begun"
DONE: Final = "pushed"
FAILED: Final = "push failed"


def begin(store: Store, grid: str, place: Place, mode: Mode) -> int:
    """Note that a push is about to write; the number of the change."""
    with store.writing() as engine:
        stamp = ledger.next_stamp(engine)
        ledger.log(engine, stamp, grid, BEGUN, new=str(place), note=str(mode))
    return stamp


def confirm(store: Store, stamp: int, grid: str, place: Place, mode: Mode, made: Outcome) -> None:
    """Note that a push has arrived."""
    note = f"{mode}: {made.added} added, {made.changed} changed, {made.removed} removed"
    with store.writing() as engine:
        ledger.log(engine, stamp, grid, DONE, new=str(place), note=note)


def fail(store: Store, stamp: int, grid: str, place: Place, reason: str) -> None:
    """Note that a push has written nothing."""
    with store.writing() as engine:
        ledger.log(engine, stamp, grid, FAILED, new=str(place), note=reason)


def unconfirmed(engine: duckdb.DuckDBPyConnection) -> list[str]:
    """A sentence for every push that was begun and never confirmed, within `Store.reading`."""
    rows = engine.execute(
        "SELECT c.grid, c.new, epoch_us(c.moment) FROM store.ledger.changes AS c"
        " WHERE c.action = $1 AND NOT EXISTS (FROM store.ledger.changes AS d WHERE"
        " (d.stamp = c.stamp AND d.action IN ($2, $3))"
        " OR (d.stamp > c.stamp AND d.action = $2 AND lower(d.new) = lower(c.new)))"
        " ORDER BY c.stamp",
        [BEGUN, DONE, FAILED],
    ).fetchall()
    return [
        f"The push of {grid} to {place} was begun at {clock(moment(begun))} and never confirmed: "
        f"it is still running or was cut off; look into {place} before you push again."
        for grid, place, begun in rows
    ]


def unconfirmed_in(store: Store) -> list[str]:
    """A sentence for every push of a store that was begun and never confirmed."""
    with store.reading() as engine:
        return unconfirmed(engine)
