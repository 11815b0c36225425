"""``midspread history``: what was done to a grid."""

from pathlib import Path

import click

from midspread.cli.help import HelpfulCommand
from midspread.cli.options import Settings, store_option
from midspread.cli.screen import result_console


@click.command(cls=HelpfulCommand, examples=("midspread history route_dwell",))
@click.argument("name", metavar="GRID")
@store_option
def history(name: str, store: Path | None) -> None:
    """What was done to a grid, the latest first.

    Versions with what caused each, and typed-in cells with the value before and after.
    """
    from midspread.cli.tables import print_table
    from midspread.engine.grids.comparing import history as history_of

    table = history_of(Settings(store=store).store_path(), name)
    print_table(result_console(), table, most_rows=0)
