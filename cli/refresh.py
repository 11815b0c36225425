"""``midspread refresh``: what is stale is computed again."""

import click

from midspread.cli.cells import visible
from midspread.cli.help import HelpfulCommand
from midspread.cli.numbers import count_text
from midspread.cli.options import Settings, engine_options
from midspread.cli.screen import Screen
from midspread.engine.errors import MidspreadError


@click.command(
    cls=HelpfulCommand,
    examples=("midspread refresh --dry-run", "midspread refresh route_dwell"),
)
@click.argument("names", metavar="[GRID ...]", nargs=-1)
@click.option("--dry-run", is_flag=True, help="Say what would be computed, and why.")
@engine_options
def refresh(names: tuple[str, ...], dry_run: bool, settings: Settings) -> None:
    """Compute stale grids again, each after those it rests on.

    Only what is stale is computed: all of it, or the named grids and what they rest on. A grid that
    fails keeps its last good contents; the others go on.
    """
    from midspread.engine.grids.model import Grid
    from midspread.engine.grids.refreshing import look, plan
    from midspread.engine.grids.refreshing import refresh as refresh_grids

    path = settings.store_path()
    if dry_run:
        with Screen() as screen, settings.session(screen) as session:
            grids, states = look(session, path)
        listed = plan(grids, states, names)
        for grid in listed:
            click.echo(f"{grid.name}: {'; '.join(states[grid.folded].why)}")
        if not listed:
            click.echo("everything is fresh")
        return
    failures = 0
    done = 0
    with Screen() as screen:

        def about(grid: Grid, place: int, count: int) -> None:
            screen.step(visible(grid.name), place, count)

        for made in refresh_grids(lambda: settings.session(screen), path, names, about):
            screen.clear()
            done += 1
            if made.is_skipped:
                click.echo(f"{made.grid.name}: left as it is, because {made.failure} failed")
            elif made.failure:
                failures += 1
                stays = ", its last good contents stay" if made.grid.version else ""
                click.echo(f"{made.grid.name}: failed{stays}: {made.failure}")
            elif made.is_changed:
                click.echo(
                    f"{made.grid.name}: version {made.grid.version}, "
                    f"{count_text(made.grid.rows, 'row')}, {made.grid.record.seconds:.2f} s "
                    f"({'; '.join(made.why)})"
                )
            else:
                click.echo(f"{made.grid.name}: computed, and the same as before")
    if not done:
        click.echo("everything is fresh")
    if failures:
        raise MidspreadError(
            f"refresh: {count_text(failures, 'grid')} of {done} failed, for the reasons above; "
            f"correct the query with midspread keep GRID --replace, or bring back what is missing."
        )
