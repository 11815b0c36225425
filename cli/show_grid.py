"""What `show` says of one grid."""

import json
from typing import TYPE_CHECKING

import click

from midspread.cli.cells import visible
from midspread.cli.numbers import count_text
from midspread.cli.options import Settings
from midspread.cli.screen import Screen

if TYPE_CHECKING:
    from rich.console import Console

    from midspread.engine.grids.freshness import Freshness
    from midspread.engine.grids.model import Grid

FIRST_ROWS = 10
_DEEPER = "  "


def is_grid(settings: Settings, name: str) -> bool:
    """Whether the store has a grid of this name."""
    path = settings.store_path()
    if not path.exists():
        return False
    from midspread.engine.errors import StoreError
    from midspread.engine.grids import ledger
    from midspread.engine.store.store import Store

    try:
        store = Store.open(path, create=False)
        with store.reading() as engine:
            found = name.casefold() in ledger.grids(engine)
    except StoreError:
        return False
    store.close()
    return found


def show_grid(
    console: "Console",
    name: str,
    settings: Settings,
    *,
    version: int | None,
    record: bool,
    rests_on: bool,
    as_json: bool,
) -> None:
    """Show a grid's columns, query and first rows, or its record, or what it rests on."""
    from midspread.engine.grids.refreshing import look

    if record:
        _print_record(name, settings, as_json)
        return
    with Screen() as screen, settings.session(screen, use_store=False) as session:
        grids, states = look(session, settings.store_path())
    grid = grids[name.casefold()]
    if rests_on:
        _print_tree(grid, grids)
        return
    _print_head(console, grid, states[grid.folded])
    _print_rows(console, grid, settings, version)


def _print_record(name: str, settings: Settings, as_json: bool) -> None:
    from midspread.engine.grids.records import record_of

    document = record_of(settings.store_path(), name)
    if as_json:
        click.echo(json.dumps(document, ensure_ascii=False, indent=2))
        return
    for step in document["steps"]:
        click.echo(f"{visible(step['grid'])}, {step['kind']}, version {step['version']}")
        for field, value in step.items():
            if field in ("grid", "kind", "version", "values") or not value:
                continue
            text = value if isinstance(value, str) else json.dumps(value, ensure_ascii=False)
            click.echo(f"  {field}: {text}")


def _print_tree(grid: "Grid", grids: "dict[str, Grid]") -> None:
    from midspread.engine.grids.resting import tree_above, tree_below

    for title, lines in (
        ("rests on", list(tree_below(grids, grid.folded))),
        ("on it rest", list(tree_above(grids, grid.folded))),
    ):
        click.echo(f"{visible(grid.name)} {title}" if title == "rests on" else title)
        for depth, words in lines or [(0, "nothing")]:
            click.echo(f"{_DEEPER * (depth + 1)}{visible(words)}")


def _print_head(console: "Console", grid: "Grid", freshness: "Freshness") -> None:
    from rich.text import Text

    from midspread.cli.tables import FAINT, HEAD, print_lines

    head = Text(visible(grid.name), style=HEAD)
    about = f"  {grid.kind}, {count_text(grid.rows, 'row')}, version {grid.version}, "
    head.append(about + str(freshness.state), style=f"not bold {FAINT}")
    lines = [head]
    lines += [Text(f"  {visible(reason)}") for reason in freshness.why]
    if grid.keys:
        lines.append(Text(f"key: {visible(', '.join(grid.keys))}", style=FAINT))
    lines.append(Text())
    widest = max((len(visible(column.name)) for column in grid.columns), default=0)
    for column in grid.columns:
        how = f" AS ({column.expression})" if column.expression else ""
        words = f"{visible(column.name).ljust(widest + 2)}{column.type}{how}"
        line = Text(words)
        line.append(f"  {column.kind}", style=FAINT)
        lines.append(line)
    if grid.sql:
        lines.append(Text())
        lines += [Text(visible(line), style="green") for line in grid.sql.splitlines()]
    lines.append(Text())
    print_lines(console, lines)


def _print_rows(console: "Console", grid: "Grid", settings: Settings, version: int | None) -> None:
    from midspread.cli.tables import print_table
    from midspread.engine.grids.comparing import version_table
    from midspread.engine.grids.entries import set_aside
    from midspread.engine.store.store import Store

    if grid.version == 0:
        click.echo(f"not computed yet; midspread refresh {grid.name}")
        return
    store = Store.open(settings.store_path(), create=False)
    try:
        with store.reading() as engine:
            table = version_table(engine, "show", grid, version or grid.version)
            rows = engine.sql(f"FROM {table} LIMIT {FIRST_ROWS}").to_arrow_table()
            aside = set_aside(engine, grid)
    finally:
        store.close()
    print_table(console, rows, note=f"the first {count_text(rows.num_rows, 'row')}")
    if aside:
        click.echo()
        click.echo("typed in for keys that are no longer there, and kept for their return:")
        for key, column, value in aside:
            click.echo(f"  {visible(key)} {visible(column)}: {visible(value or '')}")
