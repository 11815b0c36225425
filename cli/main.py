"""The command ``midspread``."""

import importlib
import os
import sys
from collections.abc import Sequence
from typing import Any, NoReturn

import click

from midspread.cli.complaints import DONE, report
from midspread.cli.help import WIDEST, write_command_list, write_options, write_usage

# In the order in which one meets them. Each is the object of the same name in the module of the
# same name, imported only when it is wanted: a kept answer is to come at once.
COMMANDS = (
    "tour",
    "query",
    "functions",
    "show",
    "keep",
    "enter",
    "column",
    "refresh",
    "history",
    "changes",
    "undo",
    "verify",
    "attach",
    "push",
    "discard",
    "store",
)


class Application(click.Group):
    """The group of all commands; every way it can end gives one sentence and an exit code."""

    def main(  # type: ignore[override]
        self,
        args: Sequence[str] | None = None,
        prog_name: str | None = None,  # noqa: ARG002  the name is always ours
        **extra: Any,
    ) -> NoReturn:
        """Run a command line and exit."""
        given = list(sys.argv[1:] if args is None else args)
        if os.environ.get("NO_COLOR"):
            extra["color"] = False
        extra.pop("standalone_mode", None)
        context: click.Context | None = None
        try:
            with self.make_context("midspread", given, **extra) as context:
                self.invoke(context)
                sys.stdout.flush()
            code = DONE
        except SystemExit:
            raise
        except BaseException as error:
            code = report(error, _command_name(error, context))
        sys.exit(code)

    def list_commands(self, ctx: click.Context) -> list[str]:  # noqa: ARG002
        """The names of the commands."""
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:  # noqa: ARG002
        """Import a command."""
        if cmd_name not in COMMANDS:
            return None
        module = importlib.import_module(f"midspread.cli.{cmd_name}")
        command: click.Command = getattr(module, cmd_name)
        return command

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        """Find the command of a command line; a misspelt one has its nearest named."""
        try:
            return super().resolve_command(ctx, args)
        except click.NoSuchCommand as error:
            raise click.NoSuchCommand(error.command_name, possibilities=COMMANDS, ctx=ctx) from None

    def format_help(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        """Write the help of the whole program."""
        write_usage(ctx, formatter)
        self.format_help_text(ctx, formatter)
        write_command_list(
            formatter,
            [
                (name, command.get_short_help_str(WIDEST))
                for name in COMMANDS
                if (command := self.get_command(ctx, name)) is not None
            ],
        )
        write_options(self, ctx, formatter)
        formatter.write(
            "\nmidspread COMMAND --help explains a command and shows an example; "
            "midspread tour is the place to begin.\n"
        )


def _command_name(error: BaseException, context: click.Context | None) -> str:
    own = getattr(error, "ctx", None)
    if own is not None and own.parent is not None:
        return str(own.info_name)
    return (context.invoked_subcommand or "") if context is not None else ""


@click.group(
    cls=Application,
    context_settings={"help_option_names": ["--help"], "max_content_width": WIDEST},
    invoke_without_command=True,
)
@click.version_option(package_name="midspread", message="midspread %(version)s")
@click.pass_context
def application(ctx: click.Context) -> None:
    """Robust statistics by group, in SQL, over large local files.

    What is typical when some rows are wild, how much the values spread, how they are shaped:
    trimmed means, robust scales and summaries as SQL functions beside AVG and MEDIAN.
    """
    if ctx.invoked_subcommand is None:
        click.echo(ctx.get_help())


def main() -> NoReturn:
    """Run the command line of this process."""
    for stream in (sys.stdout, sys.stderr):
        if not stream.isatty() and hasattr(stream, "reconfigure"):
            stream.reconfigure(encoding="utf-8")
    application.main()


if __name__ == "__main__":
    main()
