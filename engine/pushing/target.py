"""What every kind of database that takes grids can do, and the words they share."""

import re
from abc import ABC, abstractmethod
from dataclasses import dataclass
from enum import StrEnum
from typing import TYPE_CHECKING, Final

from midspread.engine.errors import MidspreadError, UsageError

if TYPE_CHECKING:
    from midspread.engine.pushing.rows import GridRows

STAGED: Final = "_midspread_rows"
"""Name of the temporary table that holds a grid's rows in the target."""
RECORDS: Final = "midspread_records"
"""Name of the table that holds records where no comment of a table can."""
_PARTS: Final = re.compile(r'\s*("(?:[^"]|"")+"|[^".]+)\s*')


class Mode(StrEnum):
    """What becomes of a table and the rows it has."""

    CREATE = "create"
    REPLACE = "replace"
    APPEND = "append"
    MERGE = "merge"


@dataclass(frozen=True)
class Place:
    """A table of a source; its schema may be left to the database."""

    source: str
    schema: str | None
    table: str

    def __str__(self) -> str:
        return ".".join(part for part in (self.source, self.schema, self.table) if part)


@dataclass(frozen=True)
class Field:
    """A column of a grid: its name, and its type in the engine's words."""

    name: str
    type: str


@dataclass(frozen=True)
class Outcome:
    """What a push does to a table's rows.

    Attributes
    ----------
    added, changed, removed : int
        How many rows.
    left : int
        Rows that were there and stay as they are.
    """

    added: int
    changed: int = 0
    left: int = 0
    removed: int = 0


class CommitUnknown(MidspreadError):
    """The connection was lost at the very moment of the commit."""


class Target(ABC):
    """A database within one transaction, which ends undone unless `commit` is called.

    Attributes
    ----------
    title : str
        What users call this kind of database.
    """

    title: str

    @abstractmethod
    def columns(self, place: Place) -> dict[str, str] | None:
        """Names and types of a table's columns; None when there is no such table.

        Raises
        ------
        MidspreadError
            When there is no such schema, or the name is that of a view.
        """

    @abstractmethod
    def table(self, place: Place) -> str:
        """The table as SQL."""

    @abstractmethod
    def type_of(self, field: Field) -> str:
        """The type that holds every value of a column exactly.

        Raises
        ------
        MidspreadError
            When there is none.
        """

    @abstractmethod
    def accepts(self, found: str, field: Field) -> bool:
        """Whether a column of a type that is there holds every value of a grid's exactly."""

    @abstractmethod
    def stage(self, rows: "GridRows", keys: list[str]) -> str:
        """Bring a grid's rows beside the table, where nobody else sees them; their table as SQL."""

    @abstractmethod
    def run(self, sql: str) -> None:
        """Run a statement."""

    @abstractmethod
    def number(self, sql: str) -> int:
        """The one whole number that a query gives."""

    @abstractmethod
    def same(self, theirs: str, ours: str, *, has_null: bool) -> str:
        """A condition for two columns, as SQL, to be equal or both NULL."""

    @abstractmethod
    def differs(self, theirs: str, ours: str) -> str:
        """A condition for two columns, as SQL, to be neither equal nor both NULL."""

    @abstractmethod
    def describe(self, place: Place, record: str, companion: list[str]) -> None:
        """Write a record beside a table: as its comment, else with statements for a row of one."""

    @abstractmethod
    def commit(self) -> None:
        """Make everything lasting."""

    def lock(self, place: Place) -> None:  # noqa: B027  a file is locked as a whole
        """Keep others from writing to a table until the transaction ends."""

    def stop(self) -> None:  # noqa: B027  nothing to do where each statement is short
        """Ask the running statement to end, from another thread."""


def read_place(text: str) -> Place:
    """The table that ``wh.schema.table`` or ``wh.table`` means; parts may be in double quotes.

    Raises
    ------
    UsageError
        When it names none.

    Examples
    --------
    >>> read_place('wh."dwell s"')
    Place(source='wh', schema=None, table='dwell s')
    """
    parts = []
    position = 0
    while match := _PARTS.match(text, position):
        part = match[1].strip()
        parts.append(part[1:-1].replace('""', '"') if part.startswith('"') else part)
        position = match.end()
        if position == len(text) or text[position] != ".":
            break
        position += 1
    if position != len(text) or len(parts) not in (2, 3) or not all(parts):
        raise UsageError(
            f"push: the place to push to is NAME.TABLE or NAME.SCHEMA.TABLE, got {text!r}; write "
            f"for example wh.main.route_dwell."
        )
    if parts[-1].casefold() == RECORDS:
        raise UsageError(
            f"push: {RECORDS} holds the records of grids that were pushed; choose another table."
        )
    return Place(parts[0], parts[1] if len(parts) == 3 else None, parts[-1])


def refused_type(field: Field, title: str) -> MidspreadError:
    """Say that a column's values cannot be held."""
    if field.type.startswith("STRUCT"):
        advice = f"make its fields columns of their own in the query, for example {field.name}.a"
    elif field.type.endswith("]") or field.type.startswith("MAP"):
        advice = f"write CAST(to_json({field.name}) AS VARCHAR) in the query"
    else:
        advice = "cast it in the query, for example to VARCHAR"
    return MidspreadError(
        f"push: the column {field.name} is {field.type}, which {title} cannot hold exactly; "
        f"{advice}."
    )


def refused_value(field: Field, value: str, title: str, advice: str) -> MidspreadError:
    """Say that some value of a column cannot be held."""
    return MidspreadError(
        f"push: the column {field.name} has {value}, which {title} cannot hold exactly; {advice}."
    )


def no_schema(place: Place) -> MidspreadError:
    """Say that there is no such schema."""
    return MidspreadError(
        f"push: {place.source} has no schema {place.schema}; create it there, or name another."
    )


def is_view(place: Place) -> MidspreadError:
    """Say that a name is that of a view."""
    return MidspreadError(f"push: {place} is a view; push to a table.")
