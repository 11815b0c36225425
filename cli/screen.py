"""What a running command says beside its result: notices and progress, on stderr."""

import sys
import time
from collections.abc import Callable
from types import TracebackType
from typing import TYPE_CHECKING, Self

import click

from midspread.cli.numbers import count_text

if TYPE_CHECKING:
    from rich.console import Console
    from rich.progress import Progress as ProgressDisplay

    from midspread.engine.session import Progress

# Whatever is quicker needs no bar.
BAR_AFTER_SECONDS = 0.5
# A pipe has no width; what is read later in an editor or a mail is best at this one.
PIPE_WIDTH = 100


class Screen:
    """Notices, and a progress line that shows itself only at a terminal and only for long work.

    Parameters
    ----------
    quiet : bool
        Whether notices are left out.
    """

    def __init__(self, *, quiet: bool = False) -> None:
        self._quiet = quiet
        self._is_terminal = sys.stderr.isatty()
        self._display: ProgressDisplay | None = None
        self._work = "working"
        self._step = (1, 1)
        self._began = time.monotonic()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.clear()

    def notice(self, words: str) -> None:
        """One line of words for the user."""
        self.clear()
        if not self._quiet:
            click.echo(click.style(f"· {words}", dim=True), err=True)

    def progress(self, made: "Progress") -> None:
        """Show how far a query is; the session calls this every now and then."""
        if self._is_terminal and made.seconds >= BAR_AFTER_SECONDS:
            place, count = self._step
            fraction = made.fraction
            if count > 1:
                fraction = (place - 1 + (fraction or 0.0)) / count
            self._show(_current_work(self._work), fraction, made.elements, made.seconds)

    def step(self, what: str, place: int, count: int) -> None:
        """Show which of several queries comes now; the progress of each is a part of the whole."""
        self._work = f"{what}, {place} of {count}"
        self._step = (place, count)
        seconds = time.monotonic() - self._began
        if self._is_terminal and seconds >= BAR_AFTER_SECONDS:
            self._show(self._work, (place - 1) / count, 0, seconds)

    def building(self, what: str) -> Callable[[float | None], None]:
        """A function that shows what share of something is done, where that is known."""
        started = time.monotonic()

        def show(fraction: float | None) -> None:
            seconds = time.monotonic() - started
            if self._is_terminal and seconds >= BAR_AFTER_SECONDS:
                self._show(what, fraction, 0, seconds)

        return show

    def _show(self, work: str, fraction: float | None, elements: int, seconds: float) -> None:
        known = fraction is not None and 0 < fraction <= 1
        done = f"{fraction:4.0%}" if known else count_text(elements, "value") if elements else ""
        fields = {"description": work, "done": done, "clock": f"{seconds:.0f} s"}
        if self._display is None:
            self._display = _new_display()
            self._display.add_task(total=None, **fields)  # type: ignore[arg-type]
            self._display.start()
        self._display.update(
            self._display.task_ids[0],
            total=1.0 if known else None,
            completed=fraction if known else 0.0,
            refresh=True,
            **fields,  # type: ignore[arg-type]
        )

    def clear(self) -> None:
        """Take the progress line away."""
        if self._display is not None:
            self._display.stop()
            self._display = None


def result_console() -> "Console":
    """Where results go when they are meant for the eye."""
    from rich.console import Console

    class Results(Console):
        def on_broken_pipe(self) -> None:
            raise BrokenPipeError  # rich would end the process by itself

    width = None if sys.stdout.isatty() else PIPE_WIDTH
    return Results(width=width, highlight=False, emoji=False, markup=False)


def _current_work(otherwise: str) -> str:
    from midspread.udfs.compiling import activity

    compiling = activity()
    return f"compiling {compiling.strip('_')}, only once" if compiling else otherwise


def _new_display() -> "ProgressDisplay":
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TextColumn

    return Progress(
        TextColumn("  {task.description}", style="dim"),
        BarColumn(bar_width=28, style="grey37", complete_style="cyan", pulse_style="cyan"),
        TextColumn("{task.fields[done]}", style="dim"),
        TextColumn("{task.fields[clock]}", style="dim"),
        console=Console(stderr=True, highlight=False),
        transient=True,
        refresh_per_second=8,
    )
