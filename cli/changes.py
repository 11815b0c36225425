"""``midspread changes``: how two versions of a grid differ."""

from pathlib import Path

import click

from midspread.cli.help import HelpfulCommand
from midspread.cli.numbers import count_text
from midspread.cli.options import Count, Settings, store_option
from midspread.cli.screen import Screen, result_console


@click.command(
    cls=HelpfulCommand,
    examples=("midspread changes route_dwell", "midspread changes route_dwell 1 2"),
)
@click.argument("name", metavar="GRID")
@click.argument("before", metavar="[FROM", type=Count(1), required=False)
@click.argument("after", metavar="[TO]]", type=Count(1), required=False)
@store_option
def changes(name: str, before: int | None, after: int | None, store: Path | None) -> None:
    """How two versions of a grid differ, row by row and cell by cell.

    Without numbers, the present version and the one before it. in_se is the size of a change in
    standard errors, where the grid has a column of the same name with _se, or one called se.
    """
    from midspread.cli.tables import print_table
    from midspread.engine.grids.comparing import changes as changes_of

    table, first, last = changes_of(Settings(store=store).store_path(), name, before, after)
    with Screen() as screen:
        screen.notice(f"{name}, version {first} to {last}")
    if not table.num_rows:
        click.echo("no row differs")
        return
    print_table(result_console(), table, note=count_text(table.num_rows, "difference"))
