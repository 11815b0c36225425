"""Whatever goes wrong: one sentence on stderr, the right exit code, no traceback."""

from collections.abc import Callable

import click
import pytest
from click.testing import Result

from midspread.cli.complaints import report
from midspread.demo_db import DemoError
from midspread.engine.errors import Interrupted, MidspreadError, UsageError

Run = Callable[..., Result]


@pytest.mark.parametrize(
    ("error", "code", "words"),
    [
        (MidspreadError("query: the disk is full."), 1, "midspread query: the disk is full."),
        (MidspreadError("trimmed_mean: no."), 1, "midspread: trimmed_mean: no."),
        (UsageError("query: no SQL."), 2, "midspread query: no SQL."),
        (DemoError("The folder is taken."), 1, "midspread: The folder is taken."),
        (Interrupted("query: interrupted."), 130, "midspread query: interrupted."),
        (KeyboardInterrupt(), 130, "midspread query: interrupted; nothing was changed."),
        (click.Abort(), 130, "midspread query: interrupted; nothing was changed."),
    ],
)
def test_each_kind_of_error(
    error: BaseException, code: int, words: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert report(error, "query") == code
    assert capsys.readouterr().err == f"{words}\n"


def test_a_surprise_gives_one_line_and_says_what_to_do(
    capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.delenv("MIDSPREAD_DEBUG", raising=False)
    assert report(ZeroDivisionError("division by zero\nand more"), "query") == 1
    said = capsys.readouterr().err
    assert said.count("\n") == 1
    assert "ZeroDivisionError: division by zero" in said
    assert "MIDSPREAD_DEBUG=1" in said


def test_the_traceback_comes_only_when_asked_for(run: Run, monkeypatch: pytest.MonkeyPatch) -> None:
    def surprise(*_arguments: object) -> None:
        raise ZeroDivisionError("division by zero")

    monkeypatch.setattr("midspread.udfs.functions", surprise)
    monkeypatch.delenv("MIDSPREAD_DEBUG", raising=False)
    answered = run("functions")
    assert answered.exit_code == 1
    assert "Traceback" not in answered.stderr
    monkeypatch.setenv("MIDSPREAD_DEBUG", "1")
    assert "Traceback" in run("functions").stderr


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["qury"], "there is no command qury; did you mean query?"),
        (["zzz"], "there is no command zzz; see midspread --help."),
        (
            ["query", "--fromat", "csv"],
            "query: there is no option --fromat; did you mean --format?",
        ),
        (["query", "--zzz"], "query: there is no option --zzz; see midspread query --help."),
        (["query", "--format", "yaml", "SELECT 1"], "query: --format: 'yaml' is not one of"),
        (["query", "--format"], "query: option '--format' requires an argument"),
        (["query", "--threads", "0", "SELECT 1"], "--threads: it takes a whole number from 1 up"),
        (["query", "--threads", "many", "SELECT 1"], "a whole number from 1 up, got 'many'"),
        (["query", "--attach", "x", "SELECT 1"], "--attach: it takes NAME=PATH"),
        (["query", "--attach", "a=b", "--attach", "a=c", "SELECT 1"], "the name a is given twice"),
        (["query", "a", "b"], "query: there is more than one argument (b); put SQL"),
        (["query"], "query: it takes SQL in quotes or --file FILE"),
        (["query", "SELECT 1", "--file", "x.sql"], "and both are given; give one of them."),
        (["query", "SELECT 1", "--replace"], "query: --replace goes with --out FILE"),
        (["tour", "--visits", "few"], "tour: --visits: it takes a whole number"),
        (["tour", "--visits", "10"], "tour: --visits takes a whole number from 1,000"),
        (["functions", "zebra"], "functions: nothing here is called 'zebra'"),
        (["functions", "trimed_mean"], "did you mean trimmed_mean"),
        (["show", " "], "show: the name is empty"),
        (["store", "burn"], "store:"),
    ],
)
def test_wrong_usage(run: Run, arguments: list[str], words: str) -> None:
    answered = run(*arguments)
    assert answered.exit_code == 2
    assert words in answered.stderr
    assert answered.stderr.startswith("midspread")
    assert answered.stderr.count("\n") == 1
    assert answered.stdout == ""
