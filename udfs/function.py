"""What a declaration holds: one function of the catalogue, or a helper behind it."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any, Literal

from midspread.udfs.parameters import Parameter

Family = Literal[
    "location",
    "weighted",
    "scale",
    "shape",
    "association",
    "re-expression",
    "comparison",
    "resampling",
    "tables",
]
Kind = Literal["aggregate", "batch", "row", "table"]


@dataclass(frozen=True)
class Function:
    """One function of the catalogue.

    See `aggregate`, `batch_aggregate`, `row_function` and `table_function` in `declaring` for how
    it is made.
    """

    name: str
    family: Family
    kind: Kind
    columns: tuple[str, ...]
    parameters: tuple[Parameter, ...]
    fields: tuple[str, ...]
    formula: str
    source: str
    breakdown: str
    cost: str
    smallest_n: int
    example: str
    description: str
    version: int = 1
    shares_sort: bool = False
    watches: bool = False
    kernel: Callable[..., Any] | None = None
    rows: Callable[[int], int] | None = None
    labels: Mapping[str, tuple[str, ...]] = field(default_factory=dict)
    field_types: Mapping[str, str] = field(default_factory=dict)
    keys: tuple[str, ...] = ()
    body: str = ""

    @property
    def is_aggregate(self) -> bool:
        """Whether a call makes one value of many rows."""
        return self.kind in ("aggregate", "batch")

    @property
    def meaning(self) -> str:
        """The first sentence of the description."""
        return self.description.split("\n", 1)[0]

    @property
    def signature(self) -> str:
        """As written in SQL, with the defaults: ``trimmed_mean(x, share := 0.2)``."""
        shown = [*self.columns]
        for parameter in self.parameters:
            default = parameter.default_text
            shown.append(f"{parameter.name} := {default}" if default else parameter.name)
        return f"{self.name}({', '.join(shown)})"

    @property
    def place(self) -> str:
        """Where a call goes in a query."""
        if self.kind == "table":
            return "in FROM, as a table"
        return "in SELECT, as AVG is" if self.is_aggregate else "anywhere, as ROUND is"


@dataclass(frozen=True)
class Helper:
    """An Arrow function that macros and table functions call; it is in no reference."""

    name: str
    result: str
    compute: Callable[..., Any]
