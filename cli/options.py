"""Options that several commands share, and the session they make."""

import functools
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from midspread.cli.screen import Screen
    from midspread.engine.session import Session

STORE_HELP = "The store of kept answers, instead of the one found by looking upward."


@dataclass(frozen=True)
class Settings:
    """What the user set for this command about memory, threads and the store."""

    memory: str | None = None
    threads: int | None = None
    store: Path | None = None

    def store_path(self) -> Path:
        """The store this command works with; it may not exist yet."""
        from midspread.engine.store.finding import find_store

        return find_store(Path(), self.store)

    def session(
        self,
        screen: "Screen",
        *,
        sources: Mapping[str, Path] | None = None,
        use_store: bool = True,
        folder: Path | None = None,
    ) -> "Session":
        """A session with these settings that speaks through a screen."""
        from midspread.engine.session import Session

        return Session(
            memory=self.memory,
            threads=self.threads,
            store=self.store,
            use_store=use_store,
            folder=folder,
            sources=sources or {},
            on_notice=screen.notice,
            on_progress=screen.progress,
        )


def names_in(option: str, text: str) -> list[str]:
    """Names given with commas between them."""
    names = [name.strip() for name in text.split(",")]
    if not all(names):
        raise click.UsageError(f"{option} takes names with commas between them, got {text!r}")
    return names


class _Source(click.ParamType[tuple[str, Path]]):
    """``NAME=PATH``."""

    name = "NAME=PATH"

    def convert(
        self, value: Any, param: click.Parameter | None, ctx: click.Context | None
    ) -> tuple[str, Path]:
        if isinstance(value, tuple):
            return value
        name, equals, path = str(value).partition("=")
        if not equals or not name.strip() or not path.strip():
            self.fail(
                f"it takes NAME=PATH, for example wh=warehouse.duckdb, got {value!r}", param, ctx
            )
        return name.strip(), Path(path.strip())


class Count(click.ParamType[int]):
    """A whole number from a smallest one up."""

    name = "N"

    def __init__(self, smallest: int) -> None:
        self._smallest = smallest

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> int:
        try:
            count = int(value)
        except ValueError:
            count = self._smallest - 1
        if count < self._smallest:
            self.fail(
                f"it takes a whole number from {self._smallest} up, got {value!r}", param, ctx
            )
        return count


Decorated = Callable[..., Any]


def engine_options(command: Decorated) -> Decorated:
    """Add ``--memory``, ``--threads`` and ``--store``, handed over as ``settings``."""

    @functools.wraps(command)
    def gathered(
        *arguments: Any, memory: str | None, threads: int | None, store: Path | None, **others: Any
    ) -> Any:
        return command(*arguments, settings=Settings(memory, threads, store), **others)

    options = (
        click.option(
            "--memory",
            metavar="SIZE",
            help="Most memory the engine takes, for example 4GB.  [the engine's own: 80 %]",
        ),
        click.option(
            "--threads",
            type=Count(1),
            metavar="N",
            help="Threads that work.  [one for each processor]",
        ),
        store_option,
    )
    made: Decorated = gathered
    for option in reversed(options):
        made = option(made)
    return made


def store_option(command: Decorated) -> Decorated:
    """Add ``--store``."""
    return click.option(
        "--store", type=click.Path(path_type=Path), metavar="FILE", help=STORE_HELP
    )(command)


def attach_option(command: Decorated) -> Decorated:
    """Add ``--attach``, handed over as a mapping of names to paths."""

    def gathered(
        ctx: click.Context, param: click.Parameter, pairs: tuple[tuple[str, Path], ...]
    ) -> dict[str, Path]:
        sources: dict[str, Path] = {}
        for name, path in pairs:
            if name in sources:
                raise click.BadParameter(f"the name {name} is given twice", ctx, param)
            sources[name] = path
        return sources

    return click.option(
        "--attach",
        "sources",
        type=_Source(),
        multiple=True,
        metavar="NAME=PATH",
        callback=gathered,
        help="A database file to read from under a name; may be given several times.",
    )(command)
