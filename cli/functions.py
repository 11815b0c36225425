"""``midspread functions``: the reference."""

import json
from collections.abc import Mapping
from typing import TYPE_CHECKING

import click

from midspread.cli.help import HelpfulCommand
from midspread.engine.errors import UsageError

if TYPE_CHECKING:
    from rich.console import Console

    from midspread.udfs import Function


@click.command(
    cls=HelpfulCommand,
    examples=(
        "midspread functions",
        "midspread functions trimmed_mean",
        "midspread functions spread",
    ),
)
@click.argument("name_or_word", metavar="[NAME or WORD]", required=False)
@click.option(
    "--format",
    "form",
    type=click.Choice(["table", "json"]),
    default="table",
    help="For the eye, or as JSON.  [table]",
)
def functions(name_or_word: str | None, form: str) -> None:
    """The reference of all functions.

    Without a name: every function by family. With the name of a function: how it is written and
    where it goes, its meaning, formula, source, breakdown point, cost, and an example computed on
    the spot. With any other word: the functions that have to do with it.
    """
    from midspread.udfs import functions as catalogue

    known = catalogue()
    chosen = _chosen(name_or_word, known)
    if form == "json":
        from midspread.cli.reference import as_record

        click.echo(json.dumps([as_record(known[n]) for n in chosen], indent=2, ensure_ascii=False))
        return
    from midspread.cli.screen import result_console

    console = result_console()
    if name_or_word is None:
        _print_all(console, known)
    elif chosen == [_as_name(name_or_word)]:
        _print_entry(console, known[chosen[0]])
    else:
        _print_found(console, name_or_word, [known[name] for name in chosen])


def _as_name(word: str) -> str:
    """A function's name as somebody may type it: in capitals, with a bracket behind."""
    return word.strip().split("(")[0].strip().lower()


def _chosen(word: str | None, known: Mapping[str, "Function"]) -> list[str]:
    from midspread.cli.function_search import find, nearest

    if word is None:
        return list(known)
    if _as_name(word) in known:
        return [_as_name(word)]
    found = find(word, known)
    if found:
        return found
    near = nearest(_as_name(word), known)
    instead = f"did you mean {' or '.join(near)}?" if near else "midspread functions lists all."
    raise UsageError(f"functions: nothing here is called {word!r} or has to do with it; {instead}")


def _print_all(console: "Console", known: Mapping[str, "Function"]) -> None:
    from rich.text import Text

    from midspread.cli.reference import WIDEST, families, list_lines
    from midspread.cli.tables import FAINT, HEAD, INDENT, print_lines
    from midspread.cli.wrapping import wrapped

    room = min(console.width, WIDEST) - INDENT
    for heading, members in families(known.values()):
        print_lines(console, [Text(line, style=HEAD) for line in wrapped(heading, room)])
        print_lines(console, [*list_lines(members, console.width), Text()])
    words = (
        "midspread functions NAME explains one and shows an example; midspread functions WORD "
        "finds some by meaning, such as spread."
    )
    print_lines(console, [Text(line, style=FAINT) for line in wrapped(words, room)])


def _print_found(console: "Console", word: str, found: list["Function"]) -> None:
    from rich.text import Text

    from midspread.cli.reference import list_lines
    from midspread.cli.tables import HEAD, print_lines

    print_lines(console, [Text(f"To do with {word}, nearest first", style=HEAD)])
    print_lines(console, list_lines(found, console.width))


def _print_entry(console: "Console", function: "Function") -> None:
    from rich.text import Text

    from midspread.cli.options import Settings
    from midspread.cli.reference import entry_lines, example_query
    from midspread.cli.sample import ABOUT, with_sample
    from midspread.cli.screen import Screen
    from midspread.cli.tables import FAINT, INDENT, print_lines, print_table
    from midspread.cli.wrapping import wrapped

    print_lines(console, entry_lines(function, console.width))
    query = example_query(function)
    about = wrapped(f"Example, over {ABOUT}", console.width - INDENT)
    print_lines(console, [Text(), *(Text(line, style=FAINT) for line in about)])
    print_lines(console, [Text(f"  {query}", style="bold"), Text()])
    with Screen(quiet=True) as screen, Settings().session(screen, use_store=False) as session:
        answer = session.query(with_sample(query))
    print_table(console, answer.table)
