"""What went wrong as one sentence on stderr and an exit code."""

import os
import sys
from typing import Final

import click

from midspread.engine.errors import MidspreadError

DONE: Final = 0
FAILED: Final = 1
WRONG_USAGE: Final = 2
INTERRUPTED: Final = 130
DEBUG_VARIABLE: Final = "MIDSPREAD_DEBUG"


def report(error: BaseException, command: str) -> int:
    """Say on stderr what went wrong; return the exit code.

    Parameters
    ----------
    error : BaseException
        Whatever ended a command.
    command : str
        The command's name, or an empty text where none was reached.

    Returns
    -------
    int
        0 finished, 1 the request failed, 2 wrong usage, 130 interrupted.
    """
    if isinstance(error, click.exceptions.Exit):
        return error.exit_code
    if isinstance(error, BrokenPipeError):
        _stop_writing()
        return DONE
    if os.environ.get(DEBUG_VARIABLE):
        import traceback

        traceback.print_exception(error)
    code, sentence = _explained(error, command)
    _say(sentence, command)
    return code


def _explained(error: BaseException, command: str) -> tuple[int, str]:
    if isinstance(error, KeyboardInterrupt | click.Abort):
        start = f"{command}: " if command else ""
        return INTERRUPTED, f"{start}interrupted; nothing was changed."
    if isinstance(error, click.ClickException):
        return WRONG_USAGE, _usage_sentence(error, command)
    if isinstance(error, MidspreadError):
        return error.exit_code, str(error)
    if type(error).__name__ == "DemoError":  # its module loads DuckDB; do not for this alone
        return FAILED, str(error)
    if isinstance(error, MemoryError):
        return FAILED, "memory ran out; give a limit with --memory, for example --memory 2GB."
    if isinstance(error, OSError) and error.strerror:
        place = f" {error.filename}" if error.filename else ""
        return FAILED, f"the system refused{place} ({error.strerror.lower()}); nothing was changed."
    return FAILED, (
        f"an error of ours stopped the command ({_brief(error)}); please report it with what "
        f"you ran and what {DEBUG_VARIABLE}=1 prints when you run it again."
    )


def _brief(error: BaseException) -> str:
    lines = str(error).splitlines()
    return f"{type(error).__name__}: {lines[0]}" if lines else type(error).__name__


def _usage_sentence(error: click.ClickException, command: str) -> str:
    """click's complaint as a sentence of ours."""
    see = f"see midspread {command} --help" if command else "see midspread --help"
    start = f"{command}: " if command else ""
    if isinstance(error, click.NoSuchOption):
        nearest = error.possibilities
        instead = f"did you mean {nearest[0]}?" if nearest else f"{see}."
        return f"{start}there is no option {error.option_name}; {instead}"
    if isinstance(error, click.MissingParameter) and error.param is not None:
        return f"{start}{error.param.get_error_hint(None)} is missing; {see}."
    if isinstance(error, click.BadParameter) and error.param is not None:
        name = error.param.opts[0] if isinstance(error.param, click.Option) else "the argument"
        return f"{start}{name}: {_as_clause(error.message)}; {see}."
    if getattr(error, "command_name", None):
        nearest = getattr(error, "possibilities", None)
        instead = f"did you mean {nearest[0]}?" if nearest else f"{see}."
        return f"there is no command {getattr(error, 'command_name', '')}; {instead}"
    message = error.format_message()
    if message.startswith("Got unexpected extra argument"):
        rest = message[message.find("(") : message.rfind(")") + 1]
        return (
            f"{start}there is more than one argument {rest}; put SQL, and a pattern such as "
            "'dwell/*.parquet', in quotes."
        )
    return f"{start}{_as_clause(message)}; {see}."


def _as_clause(message: str) -> str:
    text = " ".join(message.split()).rstrip(".")
    return text[:1].lower() + text[1:]


def _say(sentence: str, command: str) -> None:
    if command and sentence.startswith("query: "):
        # The engine speaks of queries; another command that makes one speaks of itself.
        sentence = f"{command}: {sentence.removeprefix('query: ')}"
    own = command and sentence.startswith(f"{command}: ")
    line = f"midspread {sentence}" if own else f"midspread: {sentence}"
    # Anything not printable, a lone surrogate of a file name included, must not raise here.
    click.echo(line.encode("utf-8", "backslashreplace").decode(), err=True)


def _stop_writing() -> None:
    """Leave quietly when nobody reads on: the interpreter would complain at its last flush."""
    for stream in (sys.stdout, sys.stderr):
        try:
            os.dup2(os.open(os.devnull, os.O_WRONLY), stream.fileno())
        except (OSError, ValueError):
            continue
