"""``midspread enter``: values that people type into a grid."""

from pathlib import Path

import click

from midspread.cli.help import HelpfulCommand
from midspread.cli.numbers import count_text
from midspread.cli.options import Settings, names_in, store_option


@click.command(
    cls=HelpfulCommand,
    examples=(
        'midspread enter ramps --columns "stop TEXT, ramp_s DOUBLE" --key stop',
        'midspread enter limits route=L3 share=0.25 limit_s=45 --note "driver survey"',
        'midspread enter route_dwell route=L7 "remark=school holidays in August"',
        "midspread enter limits route=L3 --delete",
    ),
)
@click.argument("name", metavar="GRID")
@click.argument("cells", metavar="[COLUMN=VALUE ...]", nargs=-1)
@click.option("--columns", metavar="TEXT", help="Make the grid: names and types with commas.")
@click.option("--key", metavar="COLUMNS", help="With --columns: those that tell rows apart.")
@click.option(
    "--from",
    "sheet",
    type=click.Path(path_type=Path),
    metavar="FILE",
    help="Take the rows of a .csv or .xlsx file.",
)
@click.option("--delete", "deleting", is_flag=True, help="Remove the row of the key given.")
@click.option("--note", metavar="TEXT", default="", help="Kept beside the change.")
@store_option
def enter(
    name: str,
    cells: tuple[str, ...],
    columns: str | None,
    key: str | None,
    sheet: Path | None,
    deleting: bool,
    note: str,
    store: Path | None,
) -> None:
    """Type values into a grid.

    The row is found by its key; in a grid of typed-in values it is made where it is missing.
    COLUMN= gives an empty text, COLUMN=NULL no value at all, COLUMN='"NULL"' the word. Every change
    is kept with its time and note: midspread history GRID.
    """
    from midspread.engine.grids import entering

    place = Settings(store=store).store_path()
    given = sum((bool(cells), columns is not None, sheet is not None))
    if given != 1 or (deleting and not cells) or (key is not None and columns is None):
        raise click.UsageError(
            "it takes COLUMN=VALUE pairs, --columns with --key, or --from FILE, one of them; "
            "--delete goes with the key's pairs"
        )
    if columns is not None:
        if key is None:
            raise click.UsageError("--columns goes with --key COLUMNS, which tell its rows apart")
        made = entering.create(place, name, columns, names_in("--key", key))
        click.echo(f"{made.name}: {count_text(len(made.columns), 'column')}, no rows yet")
        return
    if deleting:
        names, values = _pairs(cells)
        grid = entering.delete(place, name, names, values, note)
        click.echo(f"{grid.name}: 1 row removed, {count_text(grid.rows, 'row')} left")
        return
    if sheet is not None:
        from midspread.engine.grids.sheets import read_sheet

        names, rows = read_sheet(sheet)
    else:
        names, values = _pairs(cells)
        rows = [values]
    done = entering.enter(place, name, names, rows, note)
    new = f", {count_text(done.new, 'new row')}" if done.new else ""
    click.echo(f"{done.grid.name}: {count_text(done.cells, 'cell')} changed{new}")


def _pairs(cells: tuple[str, ...]) -> tuple[list[str], list[str | None]]:
    """The columns and values of ``COLUMN=VALUE``."""
    names: list[str] = []
    values: list[str | None] = []
    for cell in cells:
        name, equals, value = cell.partition("=")
        if not equals or not name.strip():
            raise click.UsageError(f"it takes COLUMN=VALUE, for example limit_s=45, got {cell!r}")
        names.append(name.strip())
        values.append(None if value == "NULL" else "NULL" if value == '"NULL"' else value)
    return names, values
