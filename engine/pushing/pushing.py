"""`push`: a grid written to a table of a remembered database, in one transaction."""

import contextlib
from collections.abc import Callable, Iterator, Sequence
from contextlib import AbstractContextManager
from dataclasses import dataclass, field
from datetime import UTC, datetime
from functools import partial
from pathlib import Path

from midspread.engine.errors import Interrupted, MidspreadError, StoreError, UsageError
from midspread.engine.grids import ledger
from midspread.engine.grids.freshness import State, freshness_of_all
from midspread.engine.grids.ledger import found_grid
from midspread.engine.grids.model import Grid
from midspread.engine.grids.records import record_of
from midspread.engine.grids.sources import Source, SourceKind, found_source, gone, sources
from midspread.engine.interrupts import run_interruptibly
from midspread.engine.parsing import quoted
from midspread.engine.pushing import intents
from midspread.engine.pushing.merging import Plan, carry_out, foresee, pairs_of
from midspread.engine.pushing.recording import as_text, companion_row
from midspread.engine.pushing.rows import GridRows
from midspread.engine.pushing.target import CommitUnknown, Mode, Outcome, Place, Target, read_place
from midspread.engine.store.store import Store
from midspread.udfs import functions

Opening = Callable[..., AbstractContextManager[Target]]


@dataclass(frozen=True)
class Wish:
    """What is to be pushed, where to and how.

    Attributes
    ----------
    grid : str
        Its name.
    place : str
        ``source.table`` or ``source.schema.table``.
    mode : Mode
        What becomes of a table that is there.
    key : tuple of str
        The columns that tell rows apart; the grid's own when empty.
    is_dry : bool
        Whether only to say what would be done.
    stale_ok : bool
        Whether a grid that is not fresh may be pushed.
    """

    grid: str
    place: str
    mode: Mode = Mode.CREATE
    key: tuple[str, ...] = ()
    is_dry: bool = False
    stale_ok: bool = False


@dataclass(frozen=True)
class Pushed:
    """What a push did, or would do: where, to how many rows, and whether it made the table."""

    grid: Grid
    place: Place
    outcome: Outcome
    is_new: bool


@dataclass
class _Work:
    """A push under way."""

    store: Store
    wish: Wish
    grid: Grid
    place: Place
    source: Source
    record: str
    rows: GridRows
    target: list[Target] = field(default_factory=list)
    done: list[Pushed] = field(default_factory=list)

    def stop(self) -> None:
        """Ask whatever is running to end."""
        self.rows.connection.interrupt()
        for target in self.target:
            target.stop()


def push(
    store_path: Path,
    wish: Wish,
    *,
    memory: str | None = None,
    threads: int | None = None,
    on_progress: Callable[[float | None], None] | None = None,
) -> Pushed:
    """Write a grid to a table of a remembered database.

    Parameters
    ----------
    store_path : Path
        The store.
    wish : Wish
        What is wanted.
    memory, threads : optional
        Limits of the engine.
    on_progress : callable, optional
        Told several times a second what share of the rows is handed over; None once all are, and
        where the target fetches them by itself.

    Raises
    ------
    MidspreadError
        With one sentence; the target is as it was.
    """
    place = read_place(wish.place)
    if wish.key and wish.mode in (Mode.CREATE, Mode.APPEND):
        raise UsageError(f"push: --key goes with --mode merge or replace, not with {wish.mode}.")
    store = Store.open(store_path, create=False)
    try:
        with store.reading() as engine:
            grid = found_grid(engine, "push", wish.grid)
            grids = ledger.grids(engine)
            source = found_source("push", sources(engine), place.source)
        if source.kind is not SourceKind.POSTGRES and not source.file(store.path.parent).is_file():
            raise MidspreadError(
                f"push: the source {source.name} {gone(source, store_path.parent)}."
            )
        document = record_of(store_path, grid.name)
        with GridRows(memory, threads) as rows:
            if not wish.stale_ok:
                _check_fresh(grid, grids, rows, store)
            elif grid.version == 0:
                raise _not_computed(grid)
            rows.copy(store, grid)
            record = as_text(document, wish.mode, datetime.now(UTC))
            work = _Work(store, wish, grid, place, source, record, rows)
            try:
                return run_interruptibly(
                    partial(_push, work),
                    work.stop,
                    None if on_progress is None else lambda: on_progress(rows.share_sent),
                )
            except Interrupted:
                if work.done:
                    raise Interrupted(
                        f"push: interrupted when the rows were in {place} already."
                    ) from None
                raise Interrupted("push: interrupted; nothing was changed.") from None
    finally:
        store.close()


def _check_fresh(grid: Grid, grids: dict[str, Grid], rows: GridRows, store: Store) -> None:
    if grid.version == 0:
        raise _not_computed(grid)
    states = freshness_of_all(grids, rows.connection, functions(), store.path.parent, [grid.folded])
    found = states[grid.folded]
    if found.state is not State.FRESH:
        why = "; ".join(found.why).rstrip(".")
        raise MidspreadError(
            f"push: {grid.name} is {found.state} ({why}); compute it again with midspread refresh "
            f"{grid.name}, or push it as it is with --stale-ok."
        )


def _not_computed(grid: Grid) -> MidspreadError:
    return MidspreadError(
        f"push: {grid.name} has not been computed yet; midspread refresh {grid.name} does it."
    )


def _opening(kind: SourceKind) -> Opening:
    """What opens a target of a kind; each is imported only when it is wanted."""
    if kind is SourceKind.DUCKDB:
        from midspread.engine.pushing.duckdb_target import opened as open_duckdb

        return open_duckdb
    if kind is SourceKind.SQLITE:
        from midspread.engine.pushing.sqlite_target import opened as open_sqlite

        return open_sqlite
    from midspread.engine.pushing.postgres_target import opened as open_postgres

    return open_postgres


def _push(work: _Work) -> Pushed:
    wish, grid, place, rows = work.wish, work.grid, work.place, work.rows
    opening = _opening(work.source.kind)
    with opening(work.source, work.store.path.parent, rows, reading=wish.is_dry) as target:
        work.target.append(target)
        found = target.columns(place)
        _check_mode(place, wish.mode, found is not None)
        keys = _keys(wish, grid, rows)
        kinds = [target.type_of(one) for one in rows.fields]
        pairs = pairs_of(target, place, rows.fields, found)
        if found is not None and not wish.is_dry:
            target.lock(place)
        staged = target.stage(rows, keys)
        plan = Plan(
            target,
            place,
            staged,
            pairs,
            tuple(pair for key in keys for pair in pairs if pair.ours == key),
            frozenset(key for key in keys if rows.has(f"{quoted(key)} IS NULL")),
            rows.count,
            wish.mode,
            found is None,
        )
        outcome = foresee(plan)
        pushed = Pushed(grid, place, outcome, plan.is_new)
        if wish.is_dry:
            return pushed
        with _noted(work, outcome):
            if plan.is_new:
                listed = zip(pairs, kinds, strict=True)
                columns = ", ".join(f"{quoted(pair.theirs)} {kind}" for pair, kind in listed)
                target.run(f"CREATE TABLE {plan.table} ({columns})")
            carry_out(plan, outcome)
            companion = companion_row(plan.table, place, grid.name, work.record)
            target.describe(place, work.record, companion)
            target.commit()
            work.done.append(pushed)
    return pushed


@contextlib.contextmanager
def _noted(work: _Work, outcome: Outcome) -> Iterator[None]:
    """Note the intent in the store, then what became of what is done in the block."""
    name, place, mode = work.grid.name, work.place, work.wish.mode
    stamp = intents.begin(work.store, name, place, mode)
    try:
        yield
    except CommitUnknown:
        raise  # nobody knows: the store goes on naming it
    except BaseException as error:
        with contextlib.suppress(StoreError):
            intents.fail(work.store, stamp, name, place, str(error).split("\n", 1)[0])
        raise
    try:
        intents.confirm(work.store, stamp, name, place, mode, outcome)
    except StoreError as error:
        raise MidspreadError(
            f"push: the rows are in {place}, but the store could not note it: {error}"
        ) from None


def _check_mode(place: Place, mode: Mode, is_there: bool) -> None:
    if mode is Mode.CREATE and is_there:
        raise MidspreadError(
            f"push: {place} is there already; choose --mode replace, append or merge, or another "
            f"table. Nothing was written."
        )
    if mode in (Mode.APPEND, Mode.MERGE) and not is_there:
        raise MidspreadError(
            f"push: there is no table {place} to {mode} to; leave --mode out to make it."
        )


def _keys(wish: Wish, grid: Grid, rows: GridRows) -> list[str]:
    """The key columns as the grid spells them, where the mode uses them."""
    if wish.mode not in (Mode.MERGE, Mode.REPLACE):
        return []
    names = {one.name.casefold(): one.name for one in rows.fields}
    wanted: Sequence[str] = wish.key or grid.keys
    if not wanted and wish.mode is Mode.MERGE:
        raise MidspreadError(
            f"push: {grid.name} has no key to merge by; name its columns with --key."
        )
    for one in wanted:
        if one.casefold() not in names:
            raise UsageError(
                f"push: --key names {one}, which is no column of {grid.name}; it has "
                f"{', '.join(names.values())}."
            )
    keys = list(dict.fromkeys(names[one.casefold()] for one in wanted))
    if wish.key:
        rows.check_key(keys)
    return keys
