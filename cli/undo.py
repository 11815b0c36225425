"""``midspread undo``: takes the last change of the store back."""

from pathlib import Path

import click

from midspread.cli.help import HelpfulCommand
from midspread.cli.options import Settings, store_option


@click.command(cls=HelpfulCommand, examples=("midspread undo", "midspread undo route_dwell"))
@click.argument("name", metavar="[GRID]", required=False)
@store_option
def undo(name: str | None, store: Path | None) -> None:
    """Take the last change of the store back: of one grid, or of all.

    A typed-in cell, a column, a replaced query, a refresh, a discarded grid. Called again, it takes
    back the change before. What was pushed to a source stays there.
    """
    from midspread.engine.grids.restoring import undo as take_back
    from midspread.engine.store.store import Store

    opened = Store.open(Settings(store=store).store_path(), create=False)
    try:
        with opened.writing() as engine:
            grids, action = take_back(engine, name)
    finally:
        opened.close()
    click.echo(f"{grids}: taken back: {action}")
