"""Whole processes: pipes, exit codes, a terminal with its progress line and Ctrl-C."""

import contextlib
import json
import os
import re
import signal
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

pexpect = pytest.importorskip("pexpect")

Spawn = Callable[..., "subprocess.CompletedProcess[str]"]

PROGRAM = [sys.executable, "-m", "midspread.cli.main"]
# Long enough to be caught in the act, and harmless when it is not.
SLOW = "SELECT sum(hash(i) % 7) AS s FROM range(4000000000) t(i)"
HIDDEN = re.compile(r"\x1b\[[0-9;?]*[A-Za-z]")


def terminal(*arguments: str, columns: int = 80, **variables: str) -> Any:
    """A command at a terminal of its own; COLUMNS would outdo its size."""
    inherited = {name: value for name, value in os.environ.items() if name != "COLUMNS"}
    return pexpect.spawn(
        PROGRAM[0],
        [*PROGRAM[1:], *arguments],
        dimensions=(40, columns),
        encoding="utf-8",
        timeout=60,
        env={**inherited, "TERM": "xterm-256color", **variables},
    )


def seen(child: Any) -> str:
    """What is left on the way to the end; a line written over another counts as two."""
    child.expect(pexpect.EOF)
    child.close()
    return re.sub("\r(?!\n)", "\n", HIDDEN.sub("", child.before)).replace("\r", "")


@pytest.mark.usefixtures("here")
def test_exit_codes_and_streams(spawn: Spawn) -> None:
    good = spawn("query", "SELECT 1 AS one")
    assert (good.returncode, good.stdout) == (0, "one\n1\n")
    failed = spawn("query", "SELECT trimmed_mean(1, 0.7)")
    assert (failed.returncode, failed.stdout) == (1, "")
    assert failed.stderr.count("\n") == 1
    assert spawn("query").returncode == 2
    assert spawn("nonsense").returncode == 2


@pytest.mark.usefixtures("here")
@pytest.mark.parametrize("options", [["--format", "csv"], ["--format", "table", "--rows", "0"]])
def test_a_reader_that_goes_away_is_no_error(options: list[str]) -> None:
    writer = subprocess.Popen(
        [*PROGRAM, "query", "SELECT i, i AS j FROM range(100000) t(i)", *options],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
    )
    assert writer.stdout is not None
    assert writer.stderr is not None
    assert writer.stdout.readline()
    writer.stdout.close()
    assert writer.wait(timeout=60) == 0
    assert b"rror" not in writer.stderr.read()
    writer.stderr.close()


@pytest.mark.usefixtures("here")
def test_an_interrupt_in_a_pipe() -> None:
    process = subprocess.Popen(
        [*PROGRAM, "query", SLOW], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    )
    with contextlib.suppress(subprocess.TimeoutExpired):
        process.wait(timeout=3)
    process.send_signal(signal.SIGINT)
    out, err = process.communicate(timeout=30)
    assert (process.returncode, out) == (130, "")
    assert err == "midspread query: interrupted; nothing was changed.\n"


@pytest.mark.usefixtures("here")
def test_a_terminal_gets_a_table_and_colours() -> None:
    child = terminal("query", "SELECT 'L1' AS route, 17.25::DOUBLE AS typical")
    child.expect(pexpect.EOF)
    child.close()
    assert child.exitstatus == 0
    assert "\x1b[" in child.before
    shown = HIDDEN.sub("", child.before).replace("\r", "")
    assert shown.splitlines()[-4:-1] == ["  route  typical", "  ─────  ───────", "  L1       17.25"]
    assert re.fullmatch(r"  1 row, \d+\.\d\d s", shown.splitlines()[-1])


@pytest.mark.usefixtures("here")
def test_a_long_query_shows_how_far_it_is_and_can_be_interrupted() -> None:
    child = terminal("query", SLOW)
    child.expect("working")
    child.expect(r"[━╸]")
    child.expect(r"\d s")
    child.sendintr()
    rest = seen(child)
    assert child.exitstatus == 130
    assert rest.strip().splitlines()[-1] == "midspread query: interrupted; nothing was changed."
    assert "Traceback" not in rest


@pytest.mark.usefixtures("here")
def test_refresh_shows_which_grid_it_is_at_and_can_be_interrupted(spawn: Spawn) -> None:
    assert spawn("keep", "slow", SLOW, "--later").returncode == 0
    child = terminal("refresh")
    child.expect("slow, 1 of 1")
    child.sendintr()
    rest = seen(child)
    assert child.exitstatus == 130
    assert rest.strip().splitlines()[-1] == "midspread refresh: interrupted; nothing was changed."
    assert "stale: it has not been computed yet" in spawn("show").stdout


@pytest.mark.usefixtures("here")
def test_compiling_is_shown_as_it_goes(tmp_path: Path) -> None:
    sql = "SELECT trimean(i) AS t FROM range(101) t(i)"
    child = terminal("query", sql, XDG_CACHE_HOME=str(tmp_path / "cache"))
    child.expect("compiling trimean, only once")
    assert "50" in seen(child)
    assert child.exitstatus == 0


@pytest.mark.usefixtures("here")
def test_a_quick_query_shows_no_progress() -> None:
    shown = seen(terminal("query", "SELECT 1 AS one"))
    assert "working" not in shown
    assert "━" not in shown


@pytest.mark.usefixtures("here")
def test_nothing_of_progress_or_colour_in_a_pipe(spawn: Spawn) -> None:
    assert "a store" in spawn("query", "SELECT 1").stderr  # a word about the store just made
    answered = spawn("query", "SELECT sum(hash(i) % 7) AS s FROM range(300000000) t(i)")
    assert answered.returncode == 0
    assert answered.stderr == ""
    for arguments in (["--help"], ["functions"], ["functions", "fences"], ["show"]):
        assert "\x1b" not in spawn(*arguments).stdout


@pytest.mark.usefixtures("here")
@pytest.mark.parametrize("columns", [60, 80, 120])
def test_nothing_is_wider_than_the_terminal(columns: int) -> None:
    summary = "FROM robust_summary('dwell/*.parquet', 'dwell_s', by := ['route', 'day_part'])"
    for arguments in (["query", summary], ["functions"], ["functions", "value_profile"]):
        lines = seen(terminal(*arguments, columns=columns)).splitlines()
        assert len(lines) > 10
        # a query to copy stays in one piece, and so does the path in a notice
        wrapped = [line for line in lines if "SELECT" not in line and not line.startswith("·")]
        assert [line for line in wrapped if len(line) > columns] == []


@pytest.mark.usefixtures("here")
def test_the_store_at_work_from_two_processes_at_once() -> None:
    sql = "SELECT stop, median(dwell_s) AS m FROM 'dwell/*.parquet' GROUP BY stop ORDER BY stop"
    command = [*PROGRAM, "query", "--format", "json", sql]
    pair = [subprocess.Popen(command, stdout=subprocess.PIPE, text=True) for _ in range(2)]
    answers = [json.loads(process.communicate(timeout=60)[0]) for process in pair]
    assert [process.returncode for process in pair] == [0, 0]
    assert answers[0] == answers[1]
    assert len(answers[0]) == 173
