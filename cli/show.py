"""``midspread show``: what there is, and what a file or table holds."""

import contextlib
import re
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import TYPE_CHECKING

import click

from midspread.cli.cells import visible
from midspread.cli.help import HelpfulCommand
from midspread.cli.numbers import count_text
from midspread.cli.options import Count, Settings, attach_option, engine_options
from midspread.cli.screen import Screen, result_console
from midspread.cli.show_grid import is_grid, show_grid
from midspread.cli.source_lines import push_lines, source_lines, sources_named
from midspread.engine.errors import MidspreadError, UsageError

if TYPE_CHECKING:
    from rich.console import Console

    from midspread.engine.session import Session

FIRST_ROWS = 10
# Counting the rows of these would mean reading all of them.
_UNCOUNTED_ENDINGS = frozenset(
    {".csv", ".tsv", ".txt", ".json", ".ndjson", ".jsonl", ".xlsx", ".gz", ".zst", ".bz2"}
)
_POSITION = re.compile(r" \(line \d+, column \d+\)")
_DUCKDB_MARK = b"DUCK"
_DUCKDB_MARK_AT = 8


@click.command(
    cls=HelpfulCommand,
    examples=(
        'midspread show "dwell/*.parquet"',
        "midspread show route_dwell --rests-on",
        "midspread show warehouse.duckdb",
        "midspread show --attach warehouse=warehouse.duckdb warehouse.routes",
    ),
)
@click.argument("name", metavar="[GRID, FILE or TABLE]", required=False)
@click.option("--version", type=Count(1), metavar="N", help="Of a grid: rows of this version.")
@click.option("--record", is_flag=True, help="Of a grid: all that is needed to compute it again.")
@click.option("--rests-on", is_flag=True, help="Of a grid: what it rests on, what rests on it.")
@click.option(
    "--format",
    "form",
    type=click.Choice(("text", "json")),
    metavar="FORMAT",
    default="text",
    help="With --record: text or json.  [text]",
)
@attach_option
@engine_options
def show(
    name: str | None,
    version: int | None,
    record: bool,
    rests_on: bool,
    form: str,
    sources: Mapping[str, Path],
    settings: Settings,
) -> None:
    """What there is, or what a grid, file or table holds.

    Without a name: the store, its grids with their state and why, and the sources. With the name of
    a grid, a file, a pattern in quotes, or a table: its columns with their types, and its first
    rows. Files are only read.
    """
    console = result_console()
    if name is not None and is_grid(settings, name):
        show_grid(
            console,
            name,
            settings,
            version=version,
            record=record,
            rests_on=rests_on,
            as_json=form == "json",
        )
    elif name is None and (version is not None or record or rests_on):
        raise UsageError(
            "show: --version, --record and --rests-on are for a grid; name it first, as in "
            "midspread show GRID --record."
        )
    elif version is not None or record or rests_on:
        raise MidspreadError(
            f"show: there is no grid {name}, and --version, --record and --rests-on are "
            f"for grids; midspread show lists those there are."
        )
    elif name is None:
        _show_what_there_is(console, settings, sources)
    elif not name.strip():
        raise UsageError("show: the name is empty; give a file, a pattern in quotes, or a table.")
    elif _is_database(Path(name)):
        _show_database(console, Path(name), settings)
    else:
        _show_rows(console, name, sources_named(settings, name, sources), settings)


def _is_database(path: Path) -> bool:
    try:
        with path.open("rb") as file:
            start = file.read(_DUCKDB_MARK_AT + len(_DUCKDB_MARK))
    except OSError:
        return False
    return start[_DUCKDB_MARK_AT:] == _DUCKDB_MARK


def _show_database(console: "Console", path: Path, settings: Settings) -> None:
    from midspread.cli.tables import print_table

    with (
        Screen() as screen,
        settings.session(screen, sources={"shown": path}, use_store=False) as session,
    ):
        answer = session.query(
            "SELECT schema_name AS schema, table_name AS name, 'table' AS kind, "
            "column_count AS columns, estimated_size AS rows "
            "FROM duckdb_tables() WHERE database_name = 'shown' AND NOT internal "
            "UNION ALL SELECT schema_name, view_name, 'view', column_count, NULL "
            "FROM duckdb_views() WHERE database_name = 'shown' AND NOT internal "
            "ORDER BY ALL"
        )
    _head(console, str(path), "a database")
    print_table(console, answer.table, most_rows=0)
    if answer.table.num_rows:
        first = answer.table.column("name")[0].as_py()
        _remark(console, f"One of them: midspread show --attach wh={path} wh.{first}")


def _show_rows(
    console: "Console", name: str, sources: Mapping[str, Path], settings: Settings
) -> None:
    from midspread.cli.tables import print_table
    from midspread.udfs.tables.relations import relation

    source = relation("show", name)
    with (
        _without_position(),
        Screen() as screen,
        settings.session(screen, sources=sources, use_store=False) as session,
    ):
        columns = session.query(f"SELECT column_name, column_type FROM (DESCRIBE FROM {source})")
        rows = session.query(f"FROM {source} LIMIT {FIRST_ROWS}")
        count = _row_count(session, name, source)
    _head(console, name, count)
    print_table(
        console, columns.table, most_rows=0, note=count_text(columns.table.num_rows, "column")
    )
    console.print()
    print_table(console, rows.table, note=f"the first {count_text(rows.table.num_rows, 'row')}")


@contextlib.contextmanager
def _without_position() -> Iterator[None]:
    """Errors that do not point into SQL which the user never wrote."""
    try:
        yield
    except MidspreadError as error:
        raise type(error)(_POSITION.sub("", str(error))) from None


def _row_count(session: "Session", name: str, source: str) -> str:
    if Path(name).suffix.lower() in _UNCOUNTED_ENDINGS:
        return ""
    rows = session.query(f"SELECT count(*) FROM {source}").rows()
    return count_text(int(str(rows[0][0])), "row")


def _show_what_there_is(
    console: "Console", settings: Settings, sources: Mapping[str, Path]
) -> None:
    from rich.text import Text

    from midspread.cli.grid_lines import grid_lines
    from midspread.cli.store import store_lines
    from midspread.cli.tables import HEAD, print_lines

    lines = [Text("The store", style=HEAD), *store_lines(settings.store), Text()]
    lines += [Text("Grids", style=HEAD), *grid_lines(settings), Text()]
    lines += [Text("Sources", style=HEAD), *source_lines(settings, sources)]
    lines += push_lines(settings)
    print_lines(console, lines)


def _head(console: "Console", name: str, about: str) -> None:
    from rich.text import Text

    from midspread.cli.tables import FAINT, HEAD, print_lines

    line = Text(visible(name), style=HEAD)
    if about:
        line.append(f"  {about}", style=f"not bold {FAINT}")
    print_lines(console, [line, Text()])


def _remark(console: "Console", words: str) -> None:
    from rich.text import Text

    from midspread.cli.tables import FAINT, print_lines

    print_lines(console, [Text(), Text(words, style=FAINT)])
