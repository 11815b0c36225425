"""What is known of a grid."""

import json
import re
from dataclasses import dataclass, field
from datetime import datetime
from enum import StrEnum
from typing import Any, Final

from midspread.engine.errors import UsageError

_RESERVED: Final = frozenset({"main", "temp", "memory", "system", "store", "information_schema"})
_FILE_LIKE: Final = re.compile(r"[./\\*?\[\]]")
MOST_LETTERS: Final = 120
RESULT: Final = "result"
"""The table that holds a grid's new rows in their scratch database."""


class GridKind(StrEnum):
    """Where a grid's rows come from."""

    ENTERED = "entered"
    DERIVED = "derived"


class ColumnKind(StrEnum):
    """Where a column's values come from."""

    DERIVED = "derived"
    ENTERED = "entered"
    COMPUTED = "computed"


@dataclass(frozen=True)
class Column:
    """A column of a grid.

    Attributes
    ----------
    name, type : str
        As in SQL.
    kind : ColumnKind
        ``derived`` by the grid's query, ``entered`` by people, ``computed`` from its own row.
    expression : str
        Of a computed column.
    """

    name: str
    type: str
    kind: ColumnKind
    expression: str = ""


@dataclass(frozen=True)
class Record:
    """What a derived grid's rows rest on, as they were when it was computed.

    Attributes
    ----------
    files : dict
        For each path or pattern, the files found: path, size, times, inode.
    definitions : dict
        Text of the views and macros behind the query.
    grids : dict
        Stamps of the grids it reads, by name.
    functions : dict
        Versions of our functions it calls.
    seeds : dict
        For each function that draws at random, the seed it uses where the query gives none.
    duckdb, midspread : str
        Versions of the engine and of this package.
    computed : str
        When, in UTC (ISO 8601).
    seconds : float
        How long it took.
    obstacle : str
        Why it cannot be known whether its inputs are unchanged; empty when it can.
    """

    files: dict[str, list[list[Any]]] = field(default_factory=dict)
    definitions: dict[str, str] = field(default_factory=dict)
    grids: dict[str, int] = field(default_factory=dict)
    functions: dict[str, int] = field(default_factory=dict)
    seeds: dict[str, int] = field(default_factory=dict)
    duckdb: str = ""
    midspread: str = ""
    computed: str = ""
    seconds: float = 0.0
    obstacle: str = ""

    def to_json(self) -> str:
        """Spell it out, as kept in the store."""
        return json.dumps(self.__dict__, ensure_ascii=False, sort_keys=True)

    @classmethod
    def from_json(cls, text: str) -> "Record":
        """Read what `to_json` wrote; fields of other versions are left out."""
        given = json.loads(text) if text else {}
        known = {name: given[name] for name in cls.__dataclass_fields__ if name in given}
        return cls(**known)


@dataclass(frozen=True)
class Grid:
    """A grid as the ledger holds it.

    Attributes
    ----------
    name : str
        As the user wrote it; compared without regard to case.
    kind : GridKind
        Entered or derived.
    sql : str
        The script of a derived grid, the query last.
    keys : tuple of str
        The columns that tell its rows apart; empty when there are none.
    columns : tuple of Column
        In order.
    stamp : int
        Number of the change that last changed its contents; 0 before it has any.
    version : int
        Number of its present contents, counted from 1; 0 before it has any.
    rows : int
        How many there are.
    changed : datetime
        When its contents last changed, in UTC.
    failure : str
        Why its last recalculation failed; empty when it did not.
    reads : tuple of str
        The grids that its query names.
    record : Record
        What its contents rest on.
    folder : str
        Where its query runs, relative to the store's folder where that is possible, so that both
        may be moved together.
    """

    name: str
    kind: GridKind
    sql: str = ""
    keys: tuple[str, ...] = ()
    columns: tuple[Column, ...] = ()
    stamp: int = 0
    version: int = 0
    rows: int = 0
    changed: datetime | None = None
    failure: str = ""
    reads: tuple[str, ...] = ()
    record: Record = field(default_factory=Record)
    folder: str = "."

    @property
    def folded(self) -> str:
        """The name in the form that names are compared in."""
        return self.name.casefold()

    def column(self, name: str) -> Column | None:
        """The column of a name, whatever its case."""
        for column in self.columns:
            if column.name.casefold() == name.casefold():
                return column
        return None

    def of_kind(self, *kinds: ColumnKind) -> list[Column]:
        """The columns of some kinds, in order."""
        return [column for column in self.columns if column.kind in kinds]


def checked_name(command: str, name: str) -> str:
    """A name that a grid may have.

    Raises
    ------
    UsageError
        When it would be taken for something else.
    """
    if not name.strip() or name != name.strip() or len(name) > MOST_LETTERS:
        raise UsageError(
            f"{command}: a grid's name must be 1 to {MOST_LETTERS} letters without blanks around "
            f"it, got {name!r}; write for example route_limits."
        )
    if _FILE_LIKE.search(name) or not name.isprintable():
        raise UsageError(
            f"{command}: {name!r} would be taken for a file; name the grid with letters, digits "
            f"and underscores, for example route_limits."
        )
    if name.casefold() in _RESERVED or name.startswith("_"):
        raise UsageError(
            f"{command}: {name} is a name of the engine's own; choose another, for example "
            f"{name.strip('_') or 'my'}_grid."
        )
    return name
