"""``midspread attach``: databases that the store remembers by name."""

from pathlib import Path

import click

from midspread.cli.cells import visible
from midspread.cli.help import HelpfulCommand
from midspread.cli.options import Settings, store_option


@click.command(
    cls=HelpfulCommand,
    examples=("midspread attach wh=warehouse.duckdb", "midspread attach wh --remove"),
)
@click.argument("given", metavar="NAME=PATH")
@click.option("--remove", "removing", is_flag=True, help="Forget the source; takes only its name.")
@store_option
def attach(given: str, removing: bool, store: Path | None) -> None:
    """Remember a database by name, or point the name to where it is now.

    FROM NAME.table then reads a DuckDB file in every command; nothing is written to it. A DuckDB or
    SQLite file, or a PostgreSQL database at postgresql://HOST:PORT/DATABASE, takes what midspread
    push sends. Its user and password come from PGUSER, PGPASSWORD or PGPASSFILE, never from here.
    """
    from midspread.engine.grids import sources

    place = Settings(store=store).store_path()
    name, equals, path = (part.strip() for part in given.partition("="))
    if removing:
        if equals:
            raise click.UsageError("--remove takes the name alone, for example wh --remove")
        gone = sources.remove(place, name)
        click.echo(f"{gone.name}: forgotten; {visible(gone.path)} is left as it is")
        return
    if not name or not path:
        raise click.UsageError(
            f"it takes NAME=PATH, for example wh=warehouse.duckdb, got {given!r}"
        )
    made = sources.attach(place, name, path)
    source, before = made.source, made.before
    title = sources.TITLES[source.kind]
    if before is None:
        click.echo(f"{source.name}: {visible(source.path)}, {title}")
    elif before.path == source.path:
        click.echo(f"{source.name}: {visible(source.path)}, {title}, as before")
    else:
        click.echo(f"{source.name}: from {visible(before.path)} to {visible(source.path)}, {title}")
