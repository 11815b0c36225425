"""The reference: complete, readable, with examples that are computed."""

import json
from collections.abc import Callable

import duckdb
import pytest
from click.testing import Result

from midspread.cli.reference import as_record, example_query, sections
from midspread.cli.sample import with_sample
from midspread.udfs import functions, register

Run = Callable[..., Result]


def words(text: str) -> str:
    return " ".join(text.split())


def test_all_functions_by_family(run: Run) -> None:
    shown = run("functions").stdout
    assert [line for line in shown.splitlines() if line.startswith("  ") and line[2] != " "][
        :1
    ] == ["  Location: what is typical"]
    for name in functions():
        assert f"    {name}(" in shown


@pytest.mark.parametrize("name", sorted(functions()))
def test_an_entry_says_everything_about_a_function(run: Run, name: str) -> None:
    function = functions()[name]
    answered = run("functions", name)
    assert answered.exit_code == 0, answered.stderr
    shown = words(answered.stdout)
    facts = [function.signature, function.place, function.source, function.breakdown, function.cost]
    for fact in [*facts, function.formula, *(p.meaning for p in function.parameters)]:
        assert words(fact) in shown
    assert function.meaning.replace("`", "") in shown
    assert words(example_query(function)) in shown
    assert "``" not in shown
    assert shown.split()[-1] in ("row", "rows")


@pytest.mark.parametrize("name", ["trimmed_mean", "qn_scale", "weighted_median"])
def test_the_example_shows_what_the_query_gives(run: Run, name: str) -> None:
    with duckdb.connect() as connection:
        register(connection)
        create, query = with_sample(example_query(functions()[name])).split(";\n")
        connection.execute(create)
        row = connection.execute(query).fetchone()
    assert row is not None
    shown = run("functions", name).stdout.split()[-3]
    assert float(shown) == pytest.approx(row[0], rel=1e-5)


def test_the_name_may_be_written_as_in_a_query(run: Run) -> None:
    assert run("functions", "Trimmed_Mean(x)").stdout == run("functions", "trimmed_mean").stdout


def test_a_word_finds_functions(run: Run) -> None:
    shown = run("functions", "spread").stdout
    assert shown.splitlines()[0].strip() == "To do with spread, nearest first"
    assert "mad_scale(x)" in shown
    assert "weighted_median" not in shown


def test_as_json(run: Run) -> None:
    records = json.loads(run("functions", "--format", "json").stdout)
    assert {record["name"] for record in records} == set(functions())
    (one,) = json.loads(run("functions", "trimmed_mean", "--format", "json").stdout)
    assert one == as_record(functions()["trimmed_mean"])
    assert one["parameters"][0]["allowed"] == "a number from 0 to 0.5"


def test_sections_of_a_description() -> None:
    text = "First.\n\nMore\nwords.\n\nNotes\n-----\nOne.\n\nTwo."
    assert sections(text) == {"": ["First.", "More words."], "Notes": ["One.", "Two."]}
