"""``midspread query``: answers SQL."""

import sys
import time
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING

import click

from midspread.cli.help import HelpfulCommand
from midspread.cli.options import Count, Settings, attach_option, engine_options
from midspread.cli.screen import Screen, result_console
from midspread.cli.scripts import read_script
from midspread.engine.errors import UsageError

if TYPE_CHECKING:
    from midspread.engine.session import Answer, Session

FORMATS = ("table", "csv", "json", "ndjson", "markdown")
ROWS_SHOWN = 40
NOTHING_ASKED = "query: the SQL defines things and asks for none; end it with a SELECT."


@click.command(
    cls=HelpfulCommand,
    examples=(
        'midspread query "SELECT route, trimmed_mean(dwell_s, 0.1) '
        "FROM 'dwell/*.parquet' GROUP BY route\"",
        "midspread query --attach warehouse=warehouse.duckdb --format markdown "
        "\"SELECT name, mad_scale(dwell_s) FROM 'dwell/*.parquet' "
        'JOIN warehouse.routes USING (route) GROUP BY name"',
        "midspread query --out stops.xlsx "
        "\"FROM robust_summary('dwell/*.parquet', 'dwell_s', by := 'stop')\"",
    ),
)
@click.argument("sql", metavar="[SQL]", required=False)
@click.option(
    "--file",
    "script_file",
    type=click.Path(path_type=Path, allow_dash=True),
    metavar="FILE",
    help="Read the SQL from a file, or from standard input with -.",
)
@click.option(
    "--format",
    "form",
    type=click.Choice(FORMATS),
    metavar="FORMAT",
    help="table, csv, json, ndjson or markdown.  [table at a terminal, csv in a pipe]",
)
@click.option(
    "--out",
    type=click.Path(path_type=Path),
    metavar="FILE",
    help="Write the result to a file: .csv, .parquet, .json or .xlsx.",
)
@click.option("--replace", is_flag=True, help="With --out: replace the file if it exists.")
@attach_option
@click.option("--recompute", is_flag=True, help="Compute anew even where an answer is kept.")
@click.option("--show-sql", is_flag=True, help="Print what the calls expand to; nothing is run.")
@click.option(
    "--rows",
    type=Count(0),
    metavar="N",
    default=ROWS_SHOWN,
    help="Rows a table shows at most; 0 shows all.  [40]",
)
@engine_options
def query(
    sql: str | None,
    script_file: Path | None,
    form: str | None,
    out: Path | None,
    replace: bool,
    sources: Mapping[str, Path],
    recompute: bool,
    show_sql: bool,
    rows: int,
    settings: Settings,
) -> None:
    """Answer SQL over files and attached databases.

    Every function of midspread functions works beside the engine's own. Several statements may be
    given, temporary views among them; each SELECT is printed in turn. Sources are only read. An
    answer is kept in the store: asked again over unchanged files, it comes from there.
    """
    script = read_script("query", sql, script_file)
    if out is not None:
        _check_target(out, replace, form)
    elif replace:
        raise UsageError("query: --replace goes with --out FILE; give both or neither.")
    chosen = form or ("table" if sys.stdout.isatty() else "csv")
    with Screen() as screen, settings.session(screen, sources=sources) as session:
        if show_sql:
            click.echo(session.expand(script))
        elif out is not None:
            _write(_only_answer(session, script, recompute, "--out"), out, replace, screen)
        elif chosen == "table":
            _print_tables(session, script, recompute, rows, screen)
        else:
            answer = _only_answer(session, script, recompute, f"--format {chosen}")
            screen.clear()
            _print_as(answer, chosen)


def _check_target(out: Path, replace: bool, form: str | None) -> None:
    if form is not None:
        raise UsageError(
            "query: --out takes its format from the ending of the file; leave --format out."
        )
    from midspread.engine.exporting import check_target

    check_target(out, replace=replace)


def _only_answer(session: "Session", script: str, recompute: bool, wish: str) -> "Answer":
    """The answer of a script that has one SELECT; another would not fit in the same output."""
    answers = session.run(script, recompute=recompute)
    first = next(answers, None)
    if first is None:
        raise UsageError(NOTHING_ASKED)
    if next(answers, None) is not None:
        raise UsageError(
            f"query: {wish} takes one SELECT, and there are more; run them one at a time, or turn "
            "all but the last into temporary views."
        )
    return first


def _print_tables(
    session: "Session", script: str, recompute: bool, rows: int, screen: Screen
) -> None:
    from midspread.cli.tables import print_table

    console = result_console()
    started = time.monotonic()
    answered = 0
    for answer in session.run(script, recompute=recompute):
        screen.clear()
        if answered:
            console.print()
        seconds = time.monotonic() - started
        remark = f", {seconds:.2f} s" if sys.stdout.isatty() else ""
        print_table(console, answer.table, rows, remark=remark)
        answered += 1
        started = time.monotonic()
    if not answered:
        raise UsageError(NOTHING_ASKED)


def _print_as(answer: "Answer", form: str) -> None:
    from midspread.engine.formatting import write_text

    write_text(answer.table, form, sys.stdout)
    sys.stdout.flush()


def _write(answer: "Answer", out: Path, replace: bool, screen: Screen) -> None:
    from midspread.cli.numbers import count_text
    from midspread.engine.exporting import write_file

    write_file(answer.table, out, replace=replace)
    screen.notice(f"{count_text(answer.table.num_rows, 'row')} written to {out}")
