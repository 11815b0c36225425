"""``midspread push``: a grid written to a remembered database."""

import click

from midspread.cli.cells import visible
from midspread.cli.help import HelpfulCommand
from midspread.cli.numbers import count_text
from midspread.cli.options import Settings, engine_options, names_in
from midspread.cli.screen import Screen

MODES = ("create", "replace", "append", "merge")


@click.command(
    cls=HelpfulCommand,
    examples=(
        "midspread push route_dwell wh.main.route_dwell --dry-run",
        "midspread push route_dwell wh.main.route_dwell",
        "midspread push route_dwell wh.main.route_dwell --mode merge",
    ),
)
@click.argument("name", metavar="GRID")
@click.argument("place", metavar="NAME.TABLE")
@click.option(
    "--mode",
    type=click.Choice(MODES),
    default="create",
    metavar="MODE",
    help="create, replace, append, or merge: update rows of a known key, add others.  [create]",
)
@click.option(
    "--key", metavar="COLUMNS", help="The columns that tell rows apart.  [the grid's key]"
)
@click.option("--dry-run", is_flag=True, help="Say how many rows it would add, change and leave.")
@click.option("--stale-ok", is_flag=True, help="Push a grid that is not fresh as it is.")
@engine_options
def push(
    name: str,
    place: str,
    mode: str,
    key: str | None,
    dry_run: bool,
    stale_ok: bool,
    settings: Settings,
) -> None:
    """Write a grid to a table of a database that midspread attach remembers.

    All of it arrives or none. create makes the table and refuses one that is there; the others need
    the columns that it has. The grid's record goes with it, as the table's comment or as a row of
    midspread_records.
    """
    from midspread.engine.pushing.pushing import Wish
    from midspread.engine.pushing.pushing import push as push_grid
    from midspread.engine.pushing.target import Mode

    keys = () if key is None else tuple(names_in("--key", key))
    with Screen() as screen:
        made = push_grid(
            settings.store_path(),
            Wish(name, place, Mode(mode), keys, dry_run, stale_ok),
            memory=settings.memory,
            threads=settings.threads,
            on_progress=screen.building(f"pushing {visible(name)}"),
        )
    outcome = made.outcome
    parts = [f"{count_text(outcome.added, 'row')} added"]
    if not made.is_new:
        parts += [f"{outcome.changed:,} changed", f"{outcome.left:,} left as they are"]
    if outcome.removed:
        parts.append(f"{outcome.removed:,} removed")
    table = f"{visible(str(made.place))}{', a new table' if made.is_new else ''}"
    would = "would be pushed" if dry_run else "pushed"
    click.echo(f"{made.grid.name} {would} to {table}: {', '.join(parts)}")
