"""``midspread column``: adds a column to a grid or drops one."""

import click

from midspread.cli.help import HelpfulCommand
from midspread.cli.options import Settings, engine_options


@click.command(
    cls=HelpfulCommand,
    examples=(
        'midspread column limits "agreed DATE"',
        'midspread column route_dwell "upper_s AS (dwell_s + 2 * se)"',
        "midspread column route_dwell upper_s --drop",
    ),
)
@click.argument("name", metavar="GRID")
@click.argument("definition", metavar="COLUMN")
@click.option("--drop", is_flag=True, help="Drop the column of this name.")
@engine_options
def column(name: str, definition: str, drop: bool, settings: Settings) -> None:
    """Add a column to a grid, in SQL's own form, or drop one.

    "remark TEXT" is filled in with midspread enter; its values follow the row's key through every
    recalculation. "upper_s AS (expression)" is computed from the row's other columns, typed-in ones
    included, at every change.
    """
    from midspread.engine.grids.columns import add_column, drop_column

    place = settings.store_path()
    if drop:
        grid = drop_column(place, name, definition.strip(), settings.memory)
        click.echo(
            f"{grid.name}: column {definition.strip()} dropped; midspread undo brings it back"
        )
        return
    grid, made = add_column(place, name, definition, settings.memory)
    how = f"computed as ({made.expression})" if made.expression else "to be typed in"
    click.echo(f"{grid.name}: column {made.name} {made.type}, {how}")
