"""A grid's record as it is written beside its rows in a target."""

import json
from datetime import datetime
from typing import Any

from midspread.engine.parsing import literal, quoted
from midspread.engine.pushing.target import RECORDS, Mode, Place

_BEGINNING = '{"record": "midspread grid"'


def as_text(document: dict[str, Any], mode: Mode, moment: datetime) -> str:
    """The record as one line of JSON, which ``midspread verify`` reads, with when and how."""
    pushed = {"moment": moment.isoformat(timespec="seconds"), "mode": str(mode)}
    return json.dumps({**document, "pushed": pushed}, ensure_ascii=False)


def is_ours(comment: str) -> bool:
    """Whether a table's comment is a record that a push wrote."""
    return comment.startswith(_BEGINNING)


def companion_row(table: str, place: Place, grid: str, record: str) -> list[str]:
    """Statements that put a record into the table of records, in place of an earlier one.

    Parameters
    ----------
    table : str
        A table beside which it stands, as SQL.
    place : Place
        The table it is about.
    grid : str
        What was pushed.
    record : str
        Its record.
    """
    records = f"{table.removesuffix(quoted(place.table))}{quoted(RECORDS)}"
    name = literal(place.table)
    return [
        f"CREATE TABLE IF NOT EXISTS {records}"
        " (table_name TEXT NOT NULL, grid TEXT NOT NULL, record TEXT NOT NULL)",
        f"DELETE FROM {records} WHERE table_name = {name}",
        f"INSERT INTO {records} (table_name, grid, record)"
        f" VALUES ({name}, {literal(grid)}, {literal(record)})",
    ]
