"""``midspread discard``: removes a grid."""

from pathlib import Path

import click

from midspread.cli.help import HelpfulCommand
from midspread.cli.options import Settings, store_option


@click.command(cls=HelpfulCommand, examples=("midspread discard limits",))
@click.argument("name", metavar="GRID")
@click.option("--with-dependents", is_flag=True, help="Remove those that rest on it too.")
@store_option
def discard(name: str, with_dependents: bool, store: Path | None) -> None:
    """Remove a grid; midspread undo brings it back until midspread store pack.

    It is refused while other grids rest on it.
    """
    from midspread.engine.grids.discarding import discard as discard_grid

    gone = discard_grid(Settings(store=store).store_path(), name, with_dependents=with_dependents)
    click.echo(f"{', '.join(gone)}: discarded; midspread undo {gone[0]} brings it back")
