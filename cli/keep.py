"""``midspread keep``: a query and its result stored as a grid."""

from collections.abc import Mapping
from pathlib import Path

import click

from midspread.cli.help import HelpfulCommand
from midspread.cli.numbers import count_text
from midspread.cli.options import Settings, attach_option, engine_options, names_in
from midspread.cli.screen import Screen
from midspread.cli.scripts import read_script


@click.command(
    cls=HelpfulCommand,
    examples=(
        'midspread keep stop_dwell "SELECT stop, trimmed_mean(dwell_s, 0.1) AS dwell_s, '
        "trimmed_mean_se(dwell_s, 0.1) AS se FROM 'dwell/*.parquet' GROUP BY stop\"",
        'midspread keep slow_stops "SELECT stop FROM stop_dwell WHERE dwell_s > 20" --key stop',
    ),
)
@click.argument("name", metavar="GRID")
@click.argument("sql", metavar="[SQL]", required=False)
@click.option(
    "--file",
    "script_file",
    type=click.Path(path_type=Path, allow_dash=True),
    metavar="FILE",
    help="Read the SQL from a file, or from standard input with -.",
)
@click.option(
    "--key",
    metavar="COLUMNS",
    help="The columns that tell its rows apart, with commas.  [those the query groups by]",
)
@click.option("--later", is_flag=True, help="Keep the query, and compute it with refresh.")
@click.option("--replace", is_flag=True, help="Change the query of a grid that is there.")
@attach_option
@engine_options
def keep(
    name: str,
    sql: str | None,
    script_file: Path | None,
    key: str | None,
    later: bool,
    replace: bool,
    sources: Mapping[str, Path],
    settings: Settings,
) -> None:
    """Store a query and its result as a grid.

    A grid is a table of the store: FROM GRID reads it in any later query. What it rests on is
    recorded, so that midspread show says when it is stale and midspread refresh computes it again.
    """
    from midspread.engine.grids.keeping import keep as keep_grid

    script = read_script("keep", sql, script_file)
    with Screen() as screen, settings.session(screen, sources=sources) as session:
        made = keep_grid(
            session,
            settings.store_path(),
            name,
            script,
            key=None if key is None else names_in("--key", key),
            later=later,
            replacing=replace,
        )
        screen.clear()
        grid = made.grid
        if later:
            click.echo(f"{grid.name}: kept for later; midspread refresh {grid.name} computes it.")
            return
        if made.is_key_inferred:
            screen.notice(
                f"its key is {', '.join(grid.keys)}, as in GROUP BY; --key names another"
                if grid.keys
                else "it has no key, so its versions cannot be compared row by row; --key names one"
            )
        if grid.record.obstacle:
            screen.notice(f"it cannot be told when it is stale: {grid.record.obstacle}")
        click.echo(
            f"{grid.name}: {count_text(grid.rows, 'row')}, version {grid.version}, "
            f"{grid.record.seconds:.2f} s"
        )
