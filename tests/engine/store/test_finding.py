"""Which store a command works with."""

from pathlib import Path

import pytest

from midspread.engine.store.finding import find_store


@pytest.fixture
def deep(tmp_path: Path) -> Path:
    folder = tmp_path / "larkmoor" / "2031" / "spring"
    folder.mkdir(parents=True)
    return folder


def test_nothing_named_and_none_above_is_this_folder(deep: Path) -> None:
    assert find_store(deep, environment={}) == deep / "midspread.duckdb"
    assert not (deep / "midspread.duckdb").exists()


def test_the_nearest_above_is_found(deep: Path) -> None:
    (deep.parent.parent / "midspread.duckdb").touch()
    assert find_store(deep, environment={}) == deep.parent.parent / "midspread.duckdb"
    (deep.parent / "midspread.duckdb").touch()
    assert find_store(deep, environment={}) == deep.parent / "midspread.duckdb"
    (deep / "midspread.duckdb").mkdir()
    assert find_store(deep, environment={}) == deep.parent / "midspread.duckdb"


def test_the_variable_beats_the_search_and_the_argument_beats_both(deep: Path) -> None:
    (deep / "midspread.duckdb").touch()
    variables = {"MIDSPREAD_STORE": str(deep / "other.duckdb")}
    assert find_store(deep, environment=variables) == deep / "other.duckdb"
    named = find_store(deep, Path("mine.duckdb"), environment=variables)
    assert named == deep / "mine.duckdb"
    assert find_store(deep, environment={"MIDSPREAD_STORE": " "}) == deep / "midspread.duckdb"


def test_the_home_folder_may_be_written_short(deep: Path) -> None:
    assert find_store(deep, Path("~/a.duckdb")) == Path.home() / "a.duckdb"


def test_the_process_environment_is_the_default(
    deep: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("MIDSPREAD_STORE", "elsewhere.duckdb")
    assert find_store(deep) == deep / "elsewhere.duckdb"
