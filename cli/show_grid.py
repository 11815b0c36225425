"""What `show` says of one grid."""

import json
from datetime import UTC, datetime
from typing import TYPE_CHECKING, Any

import click

from midspread.cli.cells import visible
from midspread.cli.numbers import count_text
from midspread.cli.options import Settings
from midspread.cli.screen import Screen

if TYPE_CHECKING:
    from rich.console import Console
    from rich.text import Text

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
    elif version is not None and version != grid.version:
        _print_earlier(console, grid, settings, version)
    else:
        _print_head(console, grid, states[grid.folded])
        _print_rows(console, grid, settings)


def _print_record(name: str, settings: Settings, as_json: bool) -> None:
    from midspread.engine.grids.records import record_of

    document = record_of(settings.store_path(), name)
    if as_json:
        click.echo(json.dumps(document, ensure_ascii=False, indent=2))
        return
    for step in document["steps"]:
        click.echo(f"{visible(step['grid'])}, {step['kind']}, version {step['version']}")
        for field, value in step.items():
            if field in ("grid", "kind", "version") or not value:
                continue
            if field in ("files", "values", "entries"):
                _print_items(field, value)
                continue
            text = value if isinstance(value, str) else json.dumps(value, ensure_ascii=False)
            click.echo(f"  {field}: {text}")


def _print_items(field: str, value: Any) -> None:
    """A line for each file of each pattern, or for each row of values."""
    if field == "files":
        for pattern, files in value.items():
            click.echo(f"  {field}: {visible(pattern)}")
            for path, size, mtime, *_ in files:
                when = datetime.fromtimestamp(mtime / 1e9, UTC)
                click.echo(f"    {visible(path)}, {size:,} bytes, of {when:%Y-%m-%d %H:%M:%S} UTC")
        return
    click.echo(f"  {field}:")
    for row in value:
        click.echo(f"    {visible(json.dumps(row, ensure_ascii=False))}")


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
    lines += _query_lines(grid.sql)
    lines.append(Text())
    print_lines(console, lines)


def _query_lines(sql: str) -> "list[Text]":
    from rich.text import Text

    return [Text(), *(Text(visible(line), style="green") for line in sql.splitlines())]


def _print_earlier(console: "Console", grid: "Grid", settings: Settings, version: int) -> None:
    """An earlier version: when it was made and why, its query then, its first rows."""
    from rich.text import Text

    from midspread.cli.tables import FAINT, HEAD, print_lines, print_table
    from midspread.engine.grids.freshness import clock
    from midspread.engine.grids.versions import earlier_version

    found = earlier_version(settings.store_path(), grid, version, FIRST_ROWS)
    head = Text(visible(grid.name), style=HEAD)
    head.append(
        f"  version {version} of {grid.version}, {count_text(found.rows, 'row')}, made "
        f"at {clock(found.made)}: {visible(found.cause)}",
        style=f"not bold {FAINT}",
    )
    print_lines(console, [head, *_query_lines(found.sql), Text()])
    print_table(console, found.first, note=f"the first {count_text(found.first.num_rows, 'row')}")


def _print_rows(console: "Console", grid: "Grid", settings: Settings) -> None:
    from midspread.cli.tables import print_table
    from midspread.engine.grids.entries import set_aside
    from midspread.engine.grids.versions import first_rows, version_table
    from midspread.engine.store.store import reading

    if grid.version == 0:
        click.echo(f"not computed yet; midspread refresh {grid.name}")
        return
    with reading(settings.store_path()) as engine:
        table = version_table(engine, "show", grid, grid.version)
        rows = first_rows(engine, grid, table, FIRST_ROWS)
        aside = set_aside(engine, grid)
    print_table(console, rows, note=f"the first {count_text(rows.num_rows, 'row')}")
    if aside:
        click.echo()
        click.echo("typed in for keys that are no longer there, and kept for their return:")
        for key, column, value in aside:
            whose = ", ".join(json.loads(key))
            click.echo(f"  {visible(column)} of {visible(whose)}: {visible(value or '')}")
