"""``midspread store``: where kept answers are, how much room they take, keeping it in order."""

from datetime import datetime
from pathlib import Path
from typing import TYPE_CHECKING

import click

from midspread.cli.cells import visible
from midspread.cli.help import HelpfulCommand
from midspread.cli.numbers import count_text, size_text
from midspread.cli.options import Count, store_option

if TYPE_CHECKING:
    from rich.text import Text

    from midspread.engine.store.store import Store

ACTIONS = ("check", "pack", "clear-answers")


@click.command(
    cls=HelpfulCommand,
    examples=("midspread store", "midspread store check", "midspread store --keep-versions 3"),
)
@click.argument("action", metavar="[check or pack or clear-answers]", required=False)
@click.option(
    "--keep-versions",
    "versions",
    type=Count(0),
    metavar="N",
    help="From now on keep N earlier versions of each grid, and let go of older ones.  [10]",
)
@store_option
def store(action: str | None, versions: int | None, store: Path | None) -> None:
    """Where the store of grids and kept answers is, and what it holds.

    check reads all of it and says what is wrong; pack gives back the room of what was dropped, and
    lets go of what undo could bring back; clear-answers drops every kept answer. The environment
    variable MIDSPREAD_STORE names a store, MIDSPREAD_ANSWERS_LIMIT the room its answers may take.
    """
    if versions is not None:
        if action is not None:
            raise click.UsageError(f"--keep-versions goes without {action}")
        _keep_versions(_place(store), versions)
        return
    if action is None:
        from midspread.cli.screen import result_console
        from midspread.cli.tables import print_lines

        print_lines(result_console(), store_lines(store))
        return
    if action not in ACTIONS:
        raise click.UsageError(
            f"there is no {action!r}; it takes {', '.join(ACTIONS[:-1])} or {ACTIONS[-1]}, or "
            "nothing to say what the store holds"
        )
    from midspread.engine.store.store import Store

    opened = Store.open(_place(store), create=False)
    try:
        {"check": _check, "pack": _pack, "clear-answers": _clear}[action](opened)
    finally:
        opened.close()


def store_lines(named: Path | None) -> "list[Text]":
    """What to say about the store, whether it exists yet or not."""
    from rich.text import Text

    from midspread.cli.tables import FAINT

    path = _place(named)
    if not path.exists():
        return [Text(visible(str(path))), Text("not there yet: the first query makes it")]
    from midspread.engine.store.housekeeping import report
    from midspread.engine.store.store import Store

    opened = Store.open(path, create=False)
    try:
        found = report(opened)
    finally:
        opened.close()
    facts = {
        "place": visible(str(found.path)),
        "file": size_text(found.file_bytes),
        "answers": count_text(found.answers, "kept answer"),
        "room": f"{size_text(found.answer_bytes)} of at most {size_text(found.limit_bytes)}",
        "versions": f"{found.versions} earlier ones of each grid are kept",
    }
    if found.oldest is not None and found.newest is not None:
        facts["kept"] = f"from {_when(found.oldest)} to {_when(found.newest)}"
    lines = []
    for name, words in facts.items():
        lines.append(Text(name.ljust(10), style=FAINT))
        lines[-1].append(words, style="not dim")
    return lines


def _place(named: Path | None) -> Path:
    from midspread.engine.store.finding import find_store

    return find_store(Path(), named)


def _when(moment: datetime) -> str:
    return moment.astimezone().strftime("%Y-%m-%d %H:%M")


def _check(opened: "Store") -> None:
    from midspread.engine.errors import StoreDamaged
    from midspread.engine.grids import ledger
    from midspread.engine.grids.upkeep import remarks_on_grids
    from midspread.engine.pushing.intents import unconfirmed_in
    from midspread.engine.store.housekeeping import check, report

    faults = check(opened)
    for fault in faults:
        click.echo(visible(fault))
    if faults:
        raise StoreDamaged(
            f"store: {count_text(len(faults), 'fault')} in {opened.path}; midspread "
            "store clear-answers drops kept answers, keep --replace computes a grid anew."
        )
    for sentence in unconfirmed_in(opened):
        click.echo(visible(sentence))
    with opened.reading() as engine:
        grids = ledger.grids(engine).values()
        remarks = remarks_on_grids(engine)
    found = report(opened)
    for remark in remarks:
        click.echo(visible(remark))
    click.echo(
        f"{visible(str(found.path))} is sound: {count_text(len(grids), 'grid')} with "
        f"{count_text(sum(grid.rows for grid in grids), 'row')} and "
        f"{count_text(found.answers, 'kept answer')} read, {size_text(found.file_bytes)}."
    )


def _keep_versions(path: Path, count: int) -> None:
    from midspread.engine.grids.keeping_versions import keep_versions

    gone = keep_versions(path, count)
    let_go = f"; {count_text(gone, 'older one')} let go" if gone else ""
    click.echo(f"{count_text(count, 'earlier version')} of each grid will be kept{let_go}.")


def _pack(opened: "Store") -> None:
    from midspread.engine.store.housekeeping import pack

    click.echo(f"{size_text(pack(opened))} given back by {visible(str(opened.path))}.")


def _clear(opened: "Store") -> None:
    from midspread.engine.store.answers import Answers

    dropped = count_text(Answers(opened).clear(), "kept answer")
    click.echo(f"{dropped} dropped from {visible(str(opened.path))}.")
