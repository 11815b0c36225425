"""``midspread history``: what was done to a grid."""

import json
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from midspread.cli.help import HelpfulCommand
from midspread.cli.numbers import count_text
from midspread.cli.options import Settings, store_option
from midspread.cli.screen import result_console

if TYPE_CHECKING:
    import pyarrow as pa


@click.command(cls=HelpfulCommand, examples=("midspread history route_dwell",))
@click.argument("name", metavar="GRID")
@store_option
def history(name: str, store: Path | None) -> None:
    """What was done to a grid, the latest first.

    Versions with what caused each, and typed-in cells with the value before and after.
    """
    from midspread.cli.tables import print_table
    from midspread.engine.grids.versions import history as history_of

    done = history_of(Settings(store=store).store_path(), name)
    print_table(
        result_console(), _told(done), most_rows=0, note=count_text(done.num_rows, "change")
    )


def _told(done: "pa.Table") -> "pa.Table":
    """The log in words, without columns that say nothing."""
    import pyarrow as pa

    lines = done.to_pylist()
    columns: dict[str, list[str | None]] = {
        "moment": [line["moment"].strftime("%Y-%m-%d %H:%M") for line in lines],
        "what": [_what(line) for line in lines],
    }
    if any(_is_of_cells(line) for line in lines):
        columns["old"] = [_old(line) for line in lines]
        columns["new"] = [line["new"] if _is_of_cells(line) else "" for line in lines]
    if any(line["note"] for line in lines):
        columns["note"] = [line["note"] or "" for line in lines]
    return pa.table({name: pa.array(texts, pa.string()) for name, texts in columns.items()})


def _what(line: Mapping[str, Any]) -> str:
    action, column = line["action"], line["column"]
    key = ", ".join(json.loads(line["key"])) if line["key"] else ""
    if line["version"] is not None:
        return f"{action}: version {line['version']}, {count_text(line['rows'], 'row')}"
    if key and column:
        return f"{action}: {column} of {key}"
    if action.startswith(("push", "attach")):
        return f"{action}: {line['new'] or line['old']}"
    detail = key or column
    return f"{action}: {detail}" if detail else str(action)


def _is_of_cells(line: Mapping[str, Any]) -> bool:
    """Whether a change has values before and after; elsewhere NULL would say nothing."""
    return line["action"] == "deleted" or (
        line["action"] == "entered" and line["column"] is not None
    )


def _old(line: Mapping[str, Any]) -> str | None:
    if line["action"] != "deleted":
        return line["old"] if _is_of_cells(line) else ""
    row = json.loads(line["old"]).items()
    return ", ".join(f"{name}={'NULL' if value is None else value}" for name, value in row)
