"""The end of the tour: results that are kept, gone over by people, and handed back.

Every line is a command as one would type it in the demo's folder; they run in this process.
"""

import contextlib
import os
import shlex
import shutil
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Final

from midspread.engine.store.finding import STORE_VARIABLE

FOLDER: Final = "months"
"""Where the months that have arrived so far are."""
ARRIVED: Final = 6
RECORD: Final = "route_dwell.json"

GRIDS: Final = ("route_dwell", "vehicle_dwell", "limits", "over_limit")
"""The grids that the tour makes."""


def _keeping(name: str, group: str) -> str:
    """The command that keeps what is typical of each group."""
    return f"""\
midspread keep {name} "
  SELECT {group},
         trimmed_mean(dwell_s, 0.1)    AS dwell_s,
         trimmed_mean_se(dwell_s, 0.1) AS se,
         mad_scale(dwell_s)            AS spread_s
  FROM '{FOLDER}/*.parquet'
  GROUP BY {group}\""""


@dataclass(frozen=True)
class Chapter:
    """One step: what it is about, the commands, what to see.

    Attributes
    ----------
    title, words, lesson : str
        As for a step of the tour.
    commands : tuple of str
        Command lines in order.
    arrives : bool
        Whether a month's file arrives before them.
    """

    title: str
    words: str
    commands: tuple[str, ...]
    lesson: str
    arrives: bool = False


CHAPTERS: Final = (
    Chapter(
        "A result that is kept",
        f"The first {ARRIVED} months lie in {FOLDER}. keep stores a query with its result as a "
        "grid, a table that any later query can read; enter makes one of typed-in values.",
        (
            _keeping("route_dwell", "route"),
            _keeping("vehicle_dwell", "vehicle"),
            'midspread enter limits --key route \\\n  --columns "route TEXT, limit_s DOUBLE"',
            'midspread enter limits route=L3 limit_s=15 --note "driver survey"',
            "midspread enter limits route=L7 limit_s=25",
            'midspread keep over_limit --key route "\n'
            "  SELECT route, dwell_s, limit_s\n"
            "  FROM route_dwell JOIN limits USING (route)\n"
            '  WHERE dwell_s > limit_s"',
        ),
        "over_limit rests on route_dwell and limits, and they on files and on people.",
    ),
    Chapter(
        "Columns of one's own",
        "A column may be computed from its row, here the time that a timetable should allow for a "
        "stop, or be typed in: then it follows its row's key.",
        (
            'midspread column route_dwell "allowance_s AS (dwell_s + 2 * spread_s)"',
            'midspread column vehicle_dwell "remark TEXT"',
            'midspread enter vehicle_dwell vehicle=V158 "remark=its clock drifts"',
        ),
        "Nothing of it is lost when the grid is computed again.",
    ),
    Chapter(
        "A new month arrives",
        "Its file is put beside the others. show says what is stale and why, refresh computes "
        "that and nothing else, changes compares the versions by key.",
        (
            "midspread show",
            "midspread refresh",
            "midspread changes route_dwell --columns dwell_s",
        ),
        "in_se tells a change from noise: beyond 2 or 3 it is more than chance.",
        arrives=True,
    ),
    Chapter(
        "Back to the warehouse",
        "push writes a grid into an attached database, the only command that ever writes to one, "
        "with a record of how it came about.",
        (
            "midspread attach wh=warehouse.duckdb",
            "midspread push vehicle_dwell wh.main.vehicle_dwell --mode replace",
            'midspread query "\n'
            "  SELECT vehicle, model, depot, dwell_s, remark\n"
            "  FROM wh.vehicles JOIN wh.vehicle_dwell USING (vehicle)\n"
            '  WHERE remark IS NOT NULL"',
        ),
        f"The record of route_dwell is in {RECORD}; midspread verify {RECORD} computes it again "
        "and compares every digit.",
    ),
)


@contextlib.contextmanager
def prepared(folder: Path, store: Path) -> Iterator[None]:
    """The folder and store of the demo as the present ones, without the grids of earlier tours."""
    months = folder / FOLDER
    shutil.rmtree(months, ignore_errors=True)
    months.mkdir()
    for place in range(ARRIVED):
        _arrive(folder, place)
    _forget_earlier(store)
    before = os.environ.get(STORE_VARIABLE)
    os.environ[STORE_VARIABLE] = str(store)
    try:
        with contextlib.chdir(folder):
            yield
    finally:
        if before is None:
            del os.environ[STORE_VARIABLE]
        else:
            os.environ[STORE_VARIABLE] = before


def next_month(folder: Path) -> None:
    """Put the file of one more month beside those that have arrived."""
    _arrive(folder, ARRIVED)


def _arrive(folder: Path, place: int) -> None:
    source = sorted((folder / "dwell").glob("*.parquet"))[place]
    shutil.copyfile(source, folder / FOLDER / source.name)


def _forget_earlier(store: Path) -> None:
    """Discard the grids that an earlier tour left, so that this one can make them."""
    from midspread.engine.grids import ledger
    from midspread.engine.grids.discarding import discard
    from midspread.engine.store.store import Store

    if not store.exists():
        return
    for name in GRIDS:
        opened = Store.open(store)
        with contextlib.closing(opened), opened.reading() as engine:
            is_there = name in ledger.grids(engine)
        if is_there:
            discard(store, name, with_dependents=True)


def run_line(line: str) -> None:
    """Run one command line of midspread in this process; its output goes where ours goes."""
    from midspread.cli.main import application

    arguments = shlex.split(line.replace("\\\n", " "))[1:]  # a shell joins such lines
    with application.make_context("midspread", arguments) as context:
        application.invoke(context)
