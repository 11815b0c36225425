"""``midspread changes``: how two versions of a grid differ."""

from typing import TYPE_CHECKING

import click

from midspread.cli.cells import columns_of
from midspread.cli.help import HelpfulCommand
from midspread.cli.numbers import count_text, single_text
from midspread.cli.options import Count, Settings, engine_options, names_in
from midspread.cli.screen import Screen, result_console

if TYPE_CHECKING:
    import pyarrow as pa


@click.command(
    cls=HelpfulCommand,
    examples=(
        "midspread changes route_dwell",
        "midspread changes route_dwell 1 2 --columns dwell_s",
    ),
)
@click.argument("name", metavar="GRID")
@click.argument("before", metavar="[FROM", type=Count(1), required=False)
@click.argument("after", metavar="[TO]]", type=Count(1), required=False)
@click.option(
    "--columns", metavar="NAMES", help="Only these columns, with commas between them.  [all]"
)
@engine_options
def changes(
    name: str, before: int | None, after: int | None, columns: str | None, settings: Settings
) -> None:
    """How two versions of a grid differ, row by row and cell by cell.

    Without numbers, the present version and the one before it. in_se is the size of a change in
    standard errors of the difference of two independent estimates, where the grid has a column of
    the same name with _se, or one called se right after it.
    """
    from rich.text import Text

    from midspread.cli import tables
    from midspread.engine.grids.comparing import changes as changes_of

    only = () if columns is None else names_in("--columns", columns)
    found = changes_of(
        settings.store_path(),
        name,
        before,
        after,
        columns=only,
        ends=(tables.MOST_ROWS - tables.LAST_ROWS, tables.LAST_ROWS),
        memory=settings.memory,
    )
    with Screen() as screen:
        screen.notice(f"{name}, version {found.first} to {found.last}")
    if not found.count:
        click.echo("no row differs")
        return
    shown = found.table.num_rows
    part = tables.Excerpt(
        columns_of(_readable(found.table)),
        found.count,
        shown,
        gap_after=tables.MOST_ROWS - tables.LAST_ROWS if shown < found.count else 0,
    )
    console = result_console()
    tables.print_lines(console, tables.laid_out(part, console.width))
    note = count_text(found.count, "difference")
    if shown < found.count:
        note += f", {found.count - shown:,} in between not shown"
    tables.print_lines(console, [Text(note, style=tables.FAINT)])


def _readable(table: "pa.Table") -> "pa.Table":
    """Numbers before and after with as many digits as one reads."""
    import pyarrow as pa

    is_number = [change is not None for change in table.column("change").to_pylist()]
    for side in ("before", "after"):
        texts = [
            single_text(float(text)) if is_one and text is not None else text
            for text, is_one in zip(table.column(side).to_pylist(), is_number, strict=True)
        ]
        place = table.schema.get_field_index(side)
        table = table.set_column(place, side, pa.array(texts, pa.string()))
    return table
