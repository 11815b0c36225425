"""``midspread verify``: recomputes a grid from its record."""

from dataclasses import replace
from pathlib import Path

import click

from midspread.cli.cells import visible
from midspread.cli.help import HelpfulCommand
from midspread.cli.options import Settings, engine_options
from midspread.cli.screen import Screen
from midspread.engine.errors import MidspreadError


@click.command(
    cls=HelpfulCommand,
    examples=("midspread verify route_dwell.json",),
)
@click.argument("file", metavar="FILE", type=click.Path(path_type=Path))
@engine_options
def verify(file: Path, settings: Settings) -> None:
    """Compute a recorded grid again and say whether every digit agrees.

    The record is what midspread show GRID --record --format json prints. Paths in its queries are
    those of the current folder. Everything is computed in a store of its own, which is removed.
    """
    from midspread.engine.grids.records import read_record
    from midspread.engine.grids.records import verify as verify_record
    from midspread.engine.grids.sources import mentioned

    document = read_record(file)
    sources = mentioned(
        settings.store_path(), (step["sql"] for step in document["steps"] if "sql" in step)
    )
    with Screen() as screen:
        verdicts = verify_record(
            lambda place: replace(settings, store=place).session(screen, sources=sources), document
        )
        screen.clear()
    for verdict in verdicts:
        words = "agrees to the last digit" if verdict.agrees else f"differs: {verdict.why}"
        click.echo(f"{visible(verdict.grid)}: {words}")
    wrong = [verdict.grid for verdict in verdicts if not verdict.agrees]
    if wrong:
        raise MidspreadError(
            f"verify: {wrong[0]} does not agree with {file}; the reasons are above."
        )
