"""Grids in a session: ``FROM grid`` reads a copy of its rows."""

from collections.abc import Collection, Mapping
from pathlib import Path

import duckdb

from midspread.engine.grids import ledger
from midspread.engine.grids.freshness import State, freshness_of_all
from midspread.engine.grids.sources import Source, sources
from midspread.engine.store.quoting import literal, quoted
from midspread.engine.store.store import Store
from midspread.udfs import Function

_HIDDEN = "_midspread_store"


class GridsInUse:
    """The grids that a session has read so far.

    Each is a temporary table of the session, copied when it is first named and again when it has
    changed: the store is attached for that moment only, so that nobody waits for a long query.

    Parameters
    ----------
    path : Path
        Of the store, which may not exist.
    connection : duckdb.DuckDBPyConnection
        The session's.

    Attributes
    ----------
    sources : dict
        The sources that the store remembered when it was last read, by folded name.
    """

    def __init__(self, path: Path, connection: duckdb.DuckDBPyConnection) -> None:
        self.path = path
        self._connection = connection
        self._brought: dict[str, int] = {}
        self.sources: dict[str, Source] = {}

    @property
    def stamps(self) -> dict[str, int]:
        """Stamps of the grids that are tables of the session now, by folded name."""
        return dict(self._brought)

    def bring(self, names: Collection[str]) -> list[str]:
        """Copy the grids among some names, and forget those that are gone.

        Parameters
        ----------
        names : collection of str
            Folded names that a script mentions; most are no grids.

        Returns
        -------
        list of str
            The grids among them, as they are written.
        """
        if not self.path.exists():
            return []
        store = Store.open(self.path, create=False)
        with store.reading() as engine:
            known = ledger.stamps(engine)
            self.sources = sources(engine)
        store.close()
        for folded in [name for name in self._brought if name not in known]:
            self._connection.execute(f"DROP TABLE IF EXISTS temp.main.{quoted(folded)}")
            del self._brought[folded]
        wanted = [known[name] for name in known if name in names]
        new = [name for name, stamp in wanted if self._brought.get(name.casefold()) != stamp]
        if new:
            self._copy(store, new)
        return [name for name, _ in wanted]

    def stale(
        self,
        names: Collection[str],
        connection: duckdb.DuckDBPyConnection,
        functions: Mapping[str, Function],
    ) -> list[str]:
        """A line for each of some grids that is not fresh.

        Parameters
        ----------
        names : collection of str
            The grids.
        connection : duckdb.DuckDBPyConnection
            Where patterns of files are matched.
        functions : mapping
            Our functions by name, for their versions.
        """
        store = Store.open(self.path, create=False)
        with store.reading() as engine:
            grids = ledger.grids(engine)
        store.close()
        wanted = [name.casefold() for name in names if name.casefold() in grids]
        states = freshness_of_all(grids, connection, functions, store.path.parent, wanted)
        return [
            f"{grids[name].name} is {states[name].state} ({'; '.join(states[name].why)}); "
            f"midspread refresh {grids[name].name} computes it again"
            for name in wanted
            if states[name].state is not State.FRESH
        ]

    def _copy(self, store: Store, names: list[str]) -> None:
        run = self._connection.execute
        with store.sharing():
            run(f"ATTACH {literal(str(store.path))} AS {_HIDDEN} (TYPE duckdb, READ_ONLY)")
            try:
                rows = run(f"SELECT grid, stamp FROM {_HIDDEN}.ledger.grids").fetchall()
                now = {name.casefold(): stamp for name, stamp in rows}
                for name in names:
                    run(
                        f"CREATE OR REPLACE TEMP TABLE {quoted(name)} AS "
                        f"FROM {_HIDDEN}.main.{quoted(name)}"
                    )
                    self._brought[name.casefold()] = now[name.casefold()]
            finally:
                run(f"DETACH {_HIDDEN}")
