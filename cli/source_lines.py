"""Sources as `show` lists them, and pushes to them that were never confirmed."""

from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING

from midspread.cli.cells import visible
from midspread.cli.numbers import size_text
from midspread.cli.options import Settings

if TYPE_CHECKING:
    from rich.text import Text

    from midspread.engine.grids.sources import Source


def source_lines(settings: Settings, given: Mapping[str, Path]) -> "list[Text]":
    """A line for each source of the store, and for each that was given for this command."""
    from rich.text import Text

    from midspread.engine.grids.sources import remembered

    path = settings.store_path()
    known = remembered(path)
    lines = [Text(_line(source, path.parent)) for source in known.values()]
    for name, place in given.items():
        state = size_text(place.stat().st_size) if place.is_file() else "missing"
        lines.append(Text(f"{visible(name)}  {visible(str(place))}, {state}"))
    return lines or [Text("none; midspread attach NAME=PATH remembers a database")]


def push_lines(settings: Settings) -> "list[Text]":
    """A line for each push that was begun and never confirmed."""
    from rich.text import Text

    from midspread.engine.pushing.intents import unconfirmed_in
    from midspread.engine.store.store import Store

    path = settings.store_path()
    if not path.exists():
        return []
    store = Store.open(path, create=False)
    try:
        return [Text(visible(sentence), style="bold") for sentence in unconfirmed_in(store)]
    finally:
        store.close()


def _line(source: "Source", folder: Path) -> str:
    from midspread.engine.grids.sources import TITLES, SourceKind, gone

    words = f"{visible(source.name)}  {visible(source.path)}, {TITLES[source.kind]}, "
    if source.kind is SourceKind.POSTGRES:
        return f"{words}for pushing to"
    place = source.file(folder)
    if not place.is_file():
        return f"{words}missing: it {visible(gone(source, folder))}"
    purpose = "" if source.kind is SourceKind.DUCKDB else ", for pushing to"
    return f"{words}{size_text(place.stat().st_size)}{purpose}"


def sources_named(settings: Settings, name: str, given: Mapping[str, Path]) -> dict[str, Path]:
    """What was given for this command, and the remembered source that a table's name begins with.

    Raises
    ------
    MidspreadError
        When that source cannot be read.
    """
    from midspread.engine.errors import MidspreadError
    from midspread.engine.grids.sources import remembered, trouble

    first = name.partition(".")[0].strip('"').casefold()
    if Path(name).exists() or first in (one.casefold() for one in given):
        return dict(given)
    path = settings.store_path()
    source = remembered(path).get(first)
    if source is None:
        return dict(given)
    why = trouble(source, path.parent)
    if why:
        raise MidspreadError(f"show: the source {source.name} {why}.")
    return {**given, source.name: source.file(path.parent)}
