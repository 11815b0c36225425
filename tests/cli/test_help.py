"""Every help explains its command, and its examples run in the demo folder."""

import shlex
from collections.abc import Callable
from importlib.metadata import version
from pathlib import Path

import click
import pytest
from click.testing import Result

from midspread.cli.main import COMMANDS, application
from midspread.cli.tour_steps import NEXT

Run = Callable[..., Result]


# What the tour leaves in its store.
PREPARED = (
    'midspread keep route_dwell "SELECT route, trimmed_mean(dwell_s, 0.1) AS dwell_s, '
    "trimmed_mean_se(dwell_s, 0.1) AS se FROM 'dwell/*.parquet' GROUP BY route\"",
    'midspread enter limits --columns "route TEXT, share DOUBLE, limit_s DOUBLE" --key route',
    "midspread enter limits route=L3 share=0.25 limit_s=45",
    'midspread column route_dwell "remark TEXT"',
    'midspread keep route_dwell --replace "SELECT route, trimmed_mean(dwell_s, 0.2) AS dwell_s, '
    "trimmed_mean_se(dwell_s, 0.2) AS se FROM 'dwell/*.parquet' GROUP BY route\"",
    "midspread attach wh=warehouse.duckdb",
)


def examples(help_text: str) -> list[str]:
    """The command lines below the heading, as a reader would copy them."""
    _, heading, below = help_text.partition("\nExample")
    assert heading, "a help without an example"
    return [line.strip() for line in below.splitlines()[1:] if line.strip()]


def test_the_commands_are_those_of_today() -> None:
    listed = "tour query functions show keep enter column refresh history changes undo verify"
    assert set(COMMANDS) == {*listed.split(), "attach", "push", "discard", "store"}


def test_the_program_lists_its_commands(run: Run) -> None:
    answered = run("--help")
    assert answered.exit_code == 0
    for name in COMMANDS:
        assert f"\n  {name} " in answered.stdout


def test_without_a_command_the_program_explains_itself(run: Run) -> None:
    assert run().stdout == run("--help").stdout
    assert run().exit_code == 0


def test_the_version_is_that_of_the_package(run: Run) -> None:
    assert run("--version").stdout == f"midspread {version('midspread')}\n"


@pytest.mark.parametrize("command", COMMANDS)
def test_every_option_is_explained(run: Run, command: str) -> None:
    answered = run(command, "--help")
    assert answered.exit_code == 0
    found = application.get_command(click.Context(application), command)
    assert found is not None
    for parameter in found.params:
        name = max(parameter.opts, key=len)
        if name.startswith("--"):
            assert name in answered.stdout
            assert getattr(parameter, "help", None)


@pytest.mark.parametrize("command", COMMANDS)
def test_no_line_of_a_help_is_too_wide_but_examples(run: Run, command: str) -> None:
    explained = run(command, "--help").stdout.partition("\nExample")[0]
    assert max(map(len, explained.splitlines())) <= 100


@pytest.mark.parametrize("command", COMMANDS)
def test_the_examples_run(run: Run, here: Path, command: str) -> None:
    assert run("query", "--format", "table", "SELECT 1").exit_code == 0  # the tour made a store
    for line in PREPARED:
        assert run(*shlex.split(line)[1:]).exit_code == 0, line
    record = run("show", "route_dwell", "--record", "--format", "json").stdout
    (here / "route_dwell.json").write_text(record, encoding="utf-8")
    shown = examples(run(command, "--help").stdout)
    assert shown
    for line in shown:
        program, *arguments = shlex.split(line)
        assert (program, arguments[0]) == ("midspread", command)
        answered = run(*arguments)
        assert answered.exit_code == 0, (line, answered.stderr)


@pytest.mark.usefixtures("here")
@pytest.mark.parametrize("line", NEXT)
def test_what_the_tour_says_to_try_next_runs(run: Run, line: str) -> None:
    answered = run(*shlex.split(line)[1:])
    assert answered.exit_code == 0, answered.stderr
