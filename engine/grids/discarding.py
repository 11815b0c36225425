"""`discard`: a grid removed, until `store pack` to be brought back by `undo`."""

from pathlib import Path

from midspread.engine.errors import MidspreadError
from midspread.engine.grids import ledger
from midspread.engine.grids.ledger import found_grid
from midspread.engine.grids.restoring import note_undo
from midspread.engine.store.store import writing


def discard(store_path: Path, name: str, *, with_dependents: bool = False) -> list[str]:
    """Remove a grid.

    Parameters
    ----------
    store_path : Path
        The store.
    name : str
        Of the grid.
    with_dependents : bool
        Whether the grids that rest on it go too; otherwise they are a reason to refuse.

    Returns
    -------
    list of str
        The grids that were removed.

    Raises
    ------
    MidspreadError
        With one sentence; nothing is changed then.
    """
    with writing(store_path) as engine:
        grids = ledger.grids(engine)
        going = [found_grid(engine, "discard", name).folded]
        for folded in going:  # grows while it is walked
            going += [
                other.folded
                for other in grids.values()
                if folded in (one.casefold() for one in other.reads) and other.folded not in going
            ]
        if len(going) > 1 and not with_dependents:
            users = ", ".join(grids[folded].name for folded in going[1:])
            raise MidspreadError(
                f"discard: {users} {'rests' if len(going) == 2 else 'rest'} on "
                f"{grids[going[0]].name}; discard that first, or all with --with-dependents."
            )
        stamp = ledger.next_stamp(engine)
        for folded in going:
            grid = grids[folded]
            note_undo(engine, stamp, grid.name, grid)
            ledger.log(engine, stamp, grid.name, "discard")
            engine.execute(f"DROP TABLE IF EXISTS {ledger.contents(grid.name)}")
            for table in ("entries", "versions"):
                engine.execute(
                    f"DELETE FROM store.ledger.{table} WHERE lower(grid) = lower($1)",
                    [grid.name],
                )
            ledger.forget_grid(engine, grid.name)
    return [grids[folded].name for folded in going]
