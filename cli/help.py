"""How a command explains itself: what it does, its options, an example that runs."""

from collections.abc import Iterable
from typing import Any

import click

WIDEST = 100
EXAMPLE_HEADING = "Example"


class HelpfulCommand(click.Command):
    """A command whose help ends with an example.

    Parameters
    ----------
    examples : iterable of str
        Whole command lines that run in the folder that ``midspread tour`` makes.
    """

    def __init__(self, *arguments: Any, examples: Iterable[str] = (), **options: Any) -> None:
        super().__init__(*arguments, **options)
        self.examples = tuple(examples)

    def format_help(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        """Write the help: usage, description, options, examples."""
        write_usage(ctx, formatter)
        self.format_help_text(ctx, formatter)
        write_options(self, ctx, formatter)
        write_examples(formatter, self.examples)


def write_options(
    command: click.Command, ctx: click.Context, formatter: click.HelpFormatter
) -> None:
    """The options as two columns."""
    records = [
        record
        for parameter in command.get_params(ctx)
        if (record := parameter.get_help_record(ctx)) is not None
    ]
    if records:
        _heading(formatter, "Options")
        formatter.indent()
        formatter.write_dl(records)
        formatter.dedent()


def write_examples(formatter: click.HelpFormatter, examples: Iterable[str]) -> None:
    """Command lines to copy, one a line and never wrapped."""
    examples = tuple(examples)
    if examples:
        heading = EXAMPLE_HEADING + ("s" if len(examples) > 1 else "")
        _heading(formatter, f"{heading}, in the folder that midspread tour makes")
        for example in examples:
            formatter.write(f"  {example}\n")


def write_command_list(formatter: click.HelpFormatter, commands: Iterable[tuple[str, str]]) -> None:
    """The commands of a group as two columns."""
    _heading(formatter, "Commands")
    formatter.indent()
    formatter.write_dl(list(commands))
    formatter.dedent()


def write_usage(ctx: click.Context, formatter: click.HelpFormatter) -> None:
    """The line that shows how the command is put together."""
    pieces = " ".join(ctx.command.collect_usage_pieces(ctx))
    formatter.write(f"{click.style(ctx.command_path, bold=True)} {pieces}\n")


def _heading(formatter: click.HelpFormatter, text: str) -> None:
    formatter.write(f"\n{click.style(text, fg='cyan', bold=True)}\n")
