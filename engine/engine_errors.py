"""What DuckDB says when it refuses something, taken apart."""

import json
import re
from dataclasses import dataclass, field
from typing import Any, Final

import duckdb

from midspread.engine.parsing import ByteOffsets

_JSON: Final = re.compile(r"\{.*\}\s*$", re.DOTALL)
_FROM_PYTHON: Final = re.compile(
    r"Python exception occurred while executing the UDF: (\w+): (.*)", re.S
)


@dataclass(frozen=True)
class EngineError:
    """One error of the engine.

    Attributes
    ----------
    kind : str
        Its kind, as ``Binder`` or ``IO``.
    words : str
        The engine's own words.
    position : int or None
        Where, as an index into the text that was run.
    details : dict
        Whatever else the engine says, such as the ``name`` it could not find.
    python_error : str
        The type of the error that one of our functions raised, if it was one.
    """

    kind: str
    words: str
    position: int | None = None
    details: dict[str, Any] = field(default_factory=dict)
    python_error: str = ""

    @classmethod
    def from_json(cls, text: str, run: str) -> "EngineError":
        """The error that ``json_serialize_sql`` tells of a text."""
        details = json.loads(text)
        kind, words = str(details.get("error_type", "")), str(details.get("error_message", ""))
        return cls(kind, words, _index(details, run), details)

    @property
    def first_line(self) -> str:
        """The first line of the engine's words, without a full stop."""
        return self.words.strip().split("\n", 1)[0].strip().rstrip(".!")


def taken_apart(error: duckdb.Error, run: str) -> EngineError:
    """An exception that running a text raised, as its parts."""
    text = str(error)
    kind, _, words = text.partition(" Error: ")
    if not words:
        kind, words = type(error).__name__.removesuffix("Exception"), text
    found = _JSON.search(text)
    details: dict[str, Any] = {}
    if found:
        try:
            details = json.loads(found[0])
        except ValueError:
            details = {}
    if details:
        kind = str(details.get("exception_type", kind))
        words = str(details.get("exception_message", words))
    from_python = _FROM_PYTHON.search(words)
    if from_python:
        return EngineError(kind, from_python[2].strip(), None, details, from_python[1])
    return EngineError(kind, words, _index(details, run), details)


def _index(details: dict[str, Any], run: str) -> int | None:
    byte = str(details.get("position", ""))
    if not byte.isdigit():
        return None
    try:
        return ByteOffsets(run).index(int(byte))
    except KeyError:
        return None


def in_full(connection: duckdb.DuckDBPyConnection, error: duckdb.Error, text: str) -> EngineError:
    """The parts of an error that a text gave, with its place if the engine will tell it.

    DuckDB leaves places out of the errors of relations, so the text is planned once more.
    """
    known = taken_apart(error, text)
    if known.details or not isinstance(
        error, (duckdb.BinderException, duckdb.CatalogException, duckdb.ParserException)
    ):
        return known
    before = "EXPLAIN "
    try:
        connection.execute(before + text).fetchall()
    except duckdb.Error as again:
        full = taken_apart(again, before + text)
        if full.first_line == known.first_line:
            position = None if full.position is None else full.position - len(before)
            return EngineError(full.kind, full.words, position, full.details)
    return known
