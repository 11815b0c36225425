"""What a query gives back."""

from dataclasses import dataclass, field
from datetime import datetime
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    import pandas as pd
    import pyarrow as pa


@dataclass(frozen=True)
class Progress:
    """How far a running query is.

    Attributes
    ----------
    fraction : float or None
        Share of the rows read, from 0 to 1, where the engine can tell.
    elements : int
        Values that our functions have worked off.
    seconds : float
        Since the query began.
    """

    fraction: float | None
    elements: int
    seconds: float


@dataclass
class Answer:
    """The rows that one SELECT gave.

    Attributes
    ----------
    sql : str
        The user's own text.
    table : pyarrow.Table
        The rows.
    from_store : datetime or None
        When the answer was kept, if it was not computed now.
    notices : list of str
        What the user should know about how it came about, a line each.
    """

    sql: str
    table: "pa.Table"
    from_store: datetime | None = None
    notices: list[str] = field(default_factory=list)

    @property
    def columns(self) -> list[str]:
        """The names of the columns; two may be the same."""
        return list(self.table.column_names)

    def arrow(self) -> "pa.Table":
        """The rows as an Arrow table."""
        return self.table

    def pandas(self) -> "pd.DataFrame":
        """The rows as a pandas data frame."""
        frame: pd.DataFrame = self.table.to_pandas()
        return frame

    def rows(self) -> list[tuple[Any, ...]]:
        """The rows as tuples of Python values."""
        columns = [column.to_pylist() for column in self.table.columns]
        return list(zip(*columns, strict=True)) if columns else []
