"""``midspread tour``: every step runs, and what its words say of the answer is true."""

import re
from collections.abc import Callable, Iterator
from pathlib import Path
from statistics import median

import pytest
from click.testing import Result

from midspread.cli.tour_grids import CHAPTERS, RECORD
from midspread.cli.tour_steps import NEXT, STEPS, WAREHOUSE
from midspread.engine.session import Session

Run = Callable[..., Result]
Ask = Callable[[str], list[dict[str, object]]]


@pytest.fixture
def ask(demo: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[Ask]:
    """The rows of a step's query, by a word of its title."""
    monkeypatch.chdir(demo)
    with Session(use_store=False, sources={WAREHOUSE: demo / "warehouse.duckdb"}) as session:

        def rows(title: str) -> list[dict[str, object]]:
            (step,) = [step for step in STEPS if title in step.title]
            found: list[dict[str, object]] = session.query(step.sql).table.to_pylist()
            return found

        yield rows


def number(row: dict[str, object], name: str) -> float:
    return float(str(row[name]))


def test_a_whole_tour(run: Run, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    answered = run("tour", "--to", "town", "--visits", "5000")
    assert answered.exit_code == 0, answered.stderr
    shown = answered.stdout
    assert "5000 stop visits" in shown
    assert "\x1b" not in shown
    count = len(STEPS) + len(CHAPTERS)
    for place, chapter in enumerate(CHAPTERS, start=len(STEPS) + 1):
        assert f"{place} of {count}  {chapter.title}" in shown
        assert " ".join(chapter.lesson.split()) in " ".join(shown.split())
    for place, step in enumerate(STEPS, start=1):
        assert f"{place} of {count}  {step.title}" in shown
        for line in step.sql.splitlines():
            assert f"    {line}\n" in shown
        assert " ".join(step.lesson.split()) in " ".join(shown.split())
    asked, _, kept = shown.partition(CHAPTERS[0].title)
    assert len(re.findall(r"\d+ rows?, ", asked)) == len(STEPS)
    assert "route_dwell: 12 rows, version 1" in kept
    assert "stale: months/2031-07.parquet is new" in kept
    assert "route_dwell: version 2, 12 rows" in kept
    assert "over_limit: 1 row, version 1" in kept
    assert "its clock drifts" in kept.partition("midspread push")[2]
    assert "rows, answered from the store, " in shown.partition("Asked again")[2]
    for line in ("cd town", *NEXT):
        assert f"  {line}\n" in shown
    assert sorted(path.name for path in tmp_path.iterdir()) == ["town"]
    assert {"dwell", "months", "route_dwell.json", "warehouse.duckdb", "midspread.duckdb"} <= {
        path.name for path in (tmp_path / "town").iterdir()
    }
    monkeypatch.chdir(tmp_path / "town")
    verified = run("verify", RECORD)
    assert verified.stdout == "route_dwell: agrees to the last digit\n", verified.stderr
    monkeypatch.chdir(tmp_path)
    again = run("tour", "--to", "town", "--visits", "5000")
    assert again.exit_code == 0
    assert "Found as it was" in again.stdout


def test_it_keeps_off_what_is_not_its_own(run: Run, tmp_path: Path) -> None:
    (tmp_path / "mine.txt").write_text("mine")
    refused = run("tour", "--to", str(tmp_path))
    assert refused.exit_code == 1
    assert refused.stderr.count("\n") == 1
    assert [path.name for path in tmp_path.iterdir()] == ["mine.txt"]


def test_the_queries_fit_a_narrow_terminal() -> None:
    typed = [line for chapter in CHAPTERS for one in chapter.commands for line in one.split("\n")]
    assert max(map(len, typed)) <= 80 - 6
    assert max(len(line) for step in STEPS for line in step.sql.splitlines()) <= 80 - 4


def test_the_last_step_asks_again() -> None:
    assert len(STEPS) <= 16  # a tour, not a course
    asked_before = [step.sql for step in STEPS[:-1]]
    assert STEPS[-1].sql not in asked_before
    assert spelling(STEPS[-1].sql) in map(spelling, asked_before)


def spelling(sql: str) -> str:
    """A query without what does not matter: comments, blanks, case."""
    lines = [line.partition("--")[0] for line in sql.splitlines()]
    return " ".join(" ".join(lines).lower().split())


def test_one_stop_is_rounded_and_there_are_zeros(ask: Ask) -> None:
    rows = ask("What the values are")
    first, second = rows[0], rows[1]
    assert first["stop"] == "L6-08"
    assert number(first, "most_frequent") % 5 == 0
    assert number(first, "most_frequent_share") > 2 * number(second, "most_frequent_share")
    assert number(first, "n_distinct") < number(second, "n_distinct")
    assert "n_zero" in first


@pytest.mark.usefixtures("here")
def test_some_clocks_stuck_at_zero(run: Run) -> None:
    (step,) = [step for step in STEPS if "What the values are" in step.title]
    every_stop = step.sql.replace("LIMIT 5", "")
    counted = f"SELECT sum(n_zero)::BIGINT AS zeros FROM ({every_stop})"
    assert int(run("query", counted).stdout.split()[1]) > 10


def test_stuck_clocks_inflate_mean_and_sd(ask: Ask) -> None:
    for row in ask("The mean beside"):
        assert number(row, "mean") > 1.2 * number(row, "trimmed_mean")
        assert number(row, "sd") > 5 * number(row, "mad_scale")


def test_the_readers_effect_is_sure_but_for_one_route(ask: Ask) -> None:
    rows = {str(row["route"]): row for row in ask("How sure that is")}
    flat = rows.pop("L9")
    assert number(flat, "lower") < 1.0 < number(flat, "upper")
    assert number(flat, "p_value") > 0.05
    most = len(rows) / 2
    assert sum(number(row, "upper") < 1.0 for row in rows.values()) > most
    p_values = [number(row, "p_value") for row in rows.values()]
    assert median(p_values) < number(flat, "p_value") and min(p_values) < 0.01


def test_a_tenth_settles_the_trimmed_mean(ask: Ask) -> None:
    path = {number(row, "share"): row for row in ask("How much has to be cut")}
    whole, tenth, half = (number(path[share], "trimmed_mean") for share in (0.0, 0.1, 0.5))
    assert abs(tenth - half) < 0.1 * abs(whole - half)
    assert number(path[0.0], "se") > 20 * number(path[0.1], "se")


def test_the_school_run_leads(ask: Ask) -> None:
    first = ask("Every route")[0]
    assert (first["route"], first["day_part"]) == ("L7", "afternoon peak")


def test_the_drifting_vehicle_leads(ask: Ask) -> None:
    first, second, *_ = ask("One vehicle")
    assert first["vehicle"] == "V158"
    assert number(first, "excess_s") > 2 * number(second, "excess_s")


def test_readers_save_time_on_most_routes_but_not_on_one(ask: Ask) -> None:
    ratios = {row["route"]: number(row, "ratio") for row in ask("Tap readers")}
    assert abs(ratios["L9"] - 1) < 0.06
    assert sum(0.75 < ratio < 0.93 for ratio in ratios.values()) > len(ratios) / 2


def test_each_route_has_its_own_limit(ask: Ask) -> None:
    shares = {row["name"]: number(row, "share") for row in ask("Each route")}
    assert shares == {"Harbour Loop": 0.05, "Ferry Steps Shuttle": 0.25, "Mill Lane": 0.1}


def test_on_the_logarithm_or_next_to_it_both_sides_are_alike(ask: Ask) -> None:
    rungs = {number(row, "power"): row for row in ask("The scale on which")}
    (best,) = [power for power, row in rungs.items() if row["best"]]
    assert best in (-0.5, 0.0, 0.5)
    assert abs(number(rungs[best], "medcouple")) < 0.06 < number(rungs[1.0], "medcouple") / 3
    assert abs(number(rungs[best], "skewness")) < number(rungs[1.0], "skewness") / 5
    assert rungs[0.0]["expression"] == 'ln("dwell_s")'


def test_one_stop_rounds_and_one_vehicle_moves_its_routes(ask: Ask) -> None:
    rounded, moving = ask("Which stop rounds")
    assert rounded == {"what": "a grid of 5.0 s", "found": "L6-08"}
    assert moving == {"what": "moves 4 routes most", "found": "V158"}


def test_the_saving_holds_but_on_one_route(ask: Ask) -> None:
    rows = {str(row["route"]): row for row in ask("Does the readers")}
    flat = rows.pop("L9")
    assert number(flat, "excluding_zero") < number(flat, "by_chance") + 0.1
    assert set(rows) == {"L2", "L10"}
    for row in (flat, *rows.values()):
        assert row["choices"] == 36  # as its words say: none is left out
    for row in rows.values():
        assert number(row, "same_sign") == 1.0
        assert number(row, "excluding_zero") > 0.9 > 5 * number(row, "by_chance")
