"""``midspread tour``: builds the demo database and walks the job on it."""

import contextlib
import json
import shlex
import time
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

import click

from midspread.cli import tour_grids
from midspread.cli.help import HelpfulCommand
from midspread.cli.numbers import count_text
from midspread.cli.options import Count, Settings, engine_options
from midspread.cli.screen import Screen, result_console
from midspread.cli.tour_steps import NEXT, STEPS, WAREHOUSE, Step
from midspread.engine.errors import UsageError

if TYPE_CHECKING:
    from rich.console import Console

    from midspread.demo_db import Demo
    from midspread.engine.session import Session

_COUNT = len(STEPS) + len(tour_grids.CHAPTERS)
DEFAULT_FOLDER = Path("larkmoor")
DEFAULT_VISITS = 2_000_000
STORE_NAME = "midspread.duckdb"


@click.command(
    cls=HelpfulCommand, examples=("midspread tour --to smaller_larkmoor --visits 20000",)
)
@click.option(
    "--to",
    "folder",
    type=click.Path(path_type=Path),
    metavar="FOLDER",
    default=DEFAULT_FOLDER,
    help="Where the demo is built: a new or empty folder, or one that holds it.  [larkmoor]",
)
@click.option(
    "--visits",
    type=Count(1),
    metavar="N",
    default=DEFAULT_VISITS,
    help="How many stop visits the demo's year has.  [2000000]",
)
@engine_options
def tour(folder: Path, visits: int, settings: Settings) -> None:
    """See the whole job done, on invented data.

    Builds a year of stop visits of Larkmoor Transit, an invented town's buses, with some clocks
    that stuck, layovers booked as dwell and one clock that drifts. Then asks what is typical, how
    much it spreads and which groups differ, a step at a time: plain words, the SQL, the answer.
    """
    from midspread.demo_db import build
    from midspread.demo_db.building import FEWEST_VISITS, MOST_VISITS

    if not FEWEST_VISITS <= visits <= MOST_VISITS:
        raise UsageError(
            f"tour: --visits takes a whole number from {FEWEST_VISITS:,} to {MOST_VISITS:,}, "
            f"got {visits}; leave it out for {DEFAULT_VISITS:,}."
        )
    console = result_console()
    _introduce(console, folder, visits)
    with Screen(quiet=True) as screen:
        started = time.monotonic()
        demo = build(
            folder,
            visits=visits,
            on_progress=screen.building("building the demo database"),
            threads=settings.threads,
        )
        screen.clear()
        _say_built(console, demo, time.monotonic() - started)
        store = (settings.store or demo.folder / STORE_NAME).absolute()
        with (
            contextlib.chdir(demo.folder),
            replace(settings, store=store).session(
                screen, folder=demo.folder, sources={WAREHOUSE: demo.warehouse}
            ) as session,
        ):
            for number, step in enumerate(STEPS, start=1):
                _take(console, screen, session, number, step)
    _keep_results(console, demo.folder.absolute(), store)
    _conclude(console, folder)


def _introduce(console: "Console", folder: Path, visits: int) -> None:
    _paragraph(
        console,
        f"Larkmoor Transit, an invented town's buses: {count_text(visits, 'stop visit')} of one "
        f"year, in {folder}.",
        style="bold",
    )


def _say_built(console: "Console", demo: "Demo", seconds: float) -> None:
    made = "found as it was" if demo.reused else f"built in {seconds:.1f} s"
    _paragraph(console, f"{made.capitalize()}: Parquet files by month and a small warehouse.")


def _take(console: "Console", screen: Screen, session: "Session", number: int, step: Step) -> None:
    """Show one step: the question, the SQL, the answer, what it says."""
    from rich.text import Text

    from midspread.cli.tables import HEAD, INDENT, print_lines, print_table

    console.print()
    print_lines(console, [Text(f"{number} of {_COUNT}  {step.title}", style=HEAD)])
    _paragraph(console, step.words)
    console.print()
    margin = " " * INDENT
    print_lines(console, [Text(margin + line, style="green") for line in step.sql.splitlines()])
    console.print()
    started = time.monotonic()
    answer = session.query(step.sql)
    seconds = time.monotonic() - started
    screen.clear()
    kept = ", answered from the store" if answer.from_store else ""
    print_table(console, answer.table, remark=f"{kept}, {seconds:.2f} s")
    _paragraph(console, step.lesson)


def _keep_results(console: "Console", folder: Path, store: Path) -> None:
    """Show what grids are for: the commands as one would type them, and what they print."""
    from rich.text import Text

    from midspread.cli.tables import HEAD, INDENT, print_lines
    from midspread.engine.grids.records import record_of

    with tour_grids.prepared(folder, store):
        for number, chapter in enumerate(tour_grids.CHAPTERS, start=len(STEPS) + 1):
            console.print()
            print_lines(console, [Text(f"{number} of {_COUNT}  {chapter.title}", style=HEAD)])
            _paragraph(console, chapter.words)
            if chapter.arrives:
                tour_grids.next_month(folder)
            for line in chapter.commands:
                console.print()
                typed = f"$ {line}".splitlines()
                print_lines(console, [Text(" " * INDENT + one, style="green") for one in typed])
                tour_grids.run_line(line)
            _paragraph(console, chapter.lesson)
        record = record_of(store, "route_dwell")
        Path(tour_grids.RECORD).write_text(json.dumps(record, indent=2), encoding="utf-8")


def _conclude(console: "Console", folder: Path) -> None:
    from rich.text import Text

    from midspread.cli.tables import FAINT, HEAD, print_lines

    console.print()
    print_lines(
        console,
        [
            Text("Where things are", style=HEAD),
            Text(f"{folder / 'dwell'}  the visits, a Parquet file a month"),
            Text(f"{folder / 'warehouse.duckdb'}  routes, stops and vehicles"),
            Text(f"{folder / STORE_NAME}  the grids, and the kept answers"),
            Text(),
            Text("What to try next", style=HEAD),
            Text(f"cd {shlex.quote(str(folder))}"),
            *(Text(line) for line in NEXT),
            Text(),
            Text("On files of your own, put their path in place of dwell/*.parquet.", style=FAINT),
        ],
    )


def _paragraph(console: "Console", words: str, style: str = "") -> None:
    from rich.text import Text

    from midspread.cli.tables import INDENT, print_lines
    from midspread.cli.wrapping import wrapped

    room = min(console.width, 100) - INDENT
    print_lines(console, [Text(line, style=style) for line in wrapped(words, room)])
