"""Kept answers as a session uses them."""

import os
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import duckdb
import pytest

from midspread.engine.errors import NotAStore, StoreBusy, StoreError
from midspread.engine.session import Answer, Session
from midspread.engine.store.store import Store

SQL = "SELECT route, trimmed_mean(dwell_s, 0.1), mad_scale(dwell_s) FROM '{}' GROUP BY 1 ORDER BY 1"


def settled(path: Path) -> None:
    """Give a file a time of last change that is long past."""
    then = time.time() - 3600
    os.utime(path, (then, then))


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A folder of two settled monthly files."""
    monkeypatch.delenv("MIDSPREAD_STORE", raising=False)
    monkeypatch.chdir(tmp_path)
    (tmp_path / "dwell").mkdir()
    write_month(tmp_path, 1)
    write_month(tmp_path, 2)
    return tmp_path


def write_month(folder: Path, month: int, add: float = 0.0) -> None:
    path = folder / "dwell" / f"month_{month}.parquet"
    with duckdb.connect() as made:
        made.execute(
            "COPY (SELECT 'R' || (i % 3) AS route, sqrt(i) + $add AS dwell_s FROM range(99) r(i)) "
            f"TO '{path}' (FORMAT parquet)",
            {"add": add + month},
        )
    settled(path)


def ask(sql: str, **how: object) -> Answer:
    """The answer of a new session, as a new command would get it."""
    notices: list[str] = []
    sources = how.pop("sources", {})
    recompute = bool(how.pop("recompute", False))
    with Session(on_notice=notices.append, sources=sources, **how) as session:  # type: ignore[arg-type]
        answer = session.query(sql, recompute=recompute)
    assert answer.notices == notices
    return answer


def test_asked_again(folder: Path) -> None:
    first = ask(SQL.format("dwell/*.parquet"))
    assert first.from_store is None
    assert first.notices == [f"a store for answers was created: {folder / 'midspread.duckdb'}"]
    again = ask(
        "select  route , Trimmed_Mean(dwell_s, 0.1),mad_scale(dwell_s) -- as before\n"
        "from 'dwell/*.parquet' group BY 1 /* the same */ order by 1;"
    )
    assert again.from_store is not None
    assert again.notices == [
        f"answered from the store, kept {again.from_store.astimezone():%F %H:%M}"
    ]
    assert again.table.equals(first.table)
    assert again.columns == first.columns


@pytest.mark.parametrize(
    "change",
    [
        lambda folder: write_month(folder, 2, add=1.0),
        lambda folder: write_month(folder, 3),
        lambda folder: (folder / "dwell" / "month_2.parquet").unlink(),
    ],
    ids=["changed", "added", "removed"],
)
def test_any_change_of_the_files_computes_anew(
    folder: Path, change: Callable[[Path], None]
) -> None:
    sql = SQL.format("dwell/*.parquet")
    before = ask(sql)
    assert ask(sql).from_store is not None
    change(folder)
    after = ask(sql)
    assert after.from_store is None
    assert not after.table.equals(before.table)
    assert ask(sql).from_store is not None


@pytest.mark.parametrize(
    "sql",
    [
        "SELECT random()",
        "SELECT now()",
        "SELECT current_date, count(*) FROM 'dwell/*.parquet'",
        "CREATE TEMP MACRO chance() AS random(); SELECT chance()",
        "CREATE TEMP VIEW drawn AS SELECT uuid() AS u; FROM drawn",
        "SET VARIABLE v = random(); SELECT getvariable('v')",
        "SELECT * FROM 'dwell/*.parquet' USING SAMPLE 3",
    ],
)
@pytest.mark.usefixtures("folder")
def test_chance_and_clocks_are_never_kept(sql: str) -> None:
    assert ask(sql).from_store is None
    assert ask(sql).from_store is None


@pytest.mark.usefixtures("folder")
def test_definitions_and_settings_belong_to_the_question() -> None:
    files = "'dwell/*.parquet'"
    view = "CREATE OR REPLACE TEMP VIEW v AS FROM {}; SELECT mad_scale(dwell_s) FROM v"
    macro = "CREATE TEMP MACRO m(a) AS trimmed_mean(a, {}); SELECT m(dwell_s) FROM " + files
    setting = "SET default_order = '{}'; SELECT dwell_s FROM " + files + " ORDER BY dwell_s LIMIT 1"
    for script, one, other in (
        (view, files, "'dwell/month_1.parquet'"),
        (macro, "0.1", "0.4"),
        (setting, "asc", "desc"),
    ):
        first = ask(script.format(one))
        assert ask(script.format(one)).table.equals(first.table)
        assert ask(script.format(one)).from_store is not None
        second = ask(script.format(other))
        assert second.from_store is None
        assert not second.table.equals(first.table)


def test_within_one_session_definitions_count_as_well(folder: Path) -> None:
    sql = "SELECT count(*) FROM v"
    with Session(folder=folder) as session:
        list(session.run("CREATE TEMP VIEW v AS FROM 'dwell/month_1.parquet'"))
        assert session.query(sql).from_store is None
        assert session.query(sql).from_store is not None
        list(session.run("CREATE OR REPLACE TEMP VIEW v AS FROM 'dwell/*.parquet'"))
        answer = session.query(sql)
        assert (answer.from_store, answer.rows()) == (None, [(198,)])
        assert session.query(sql).from_store is not None


def test_a_kept_answer_makes_no_view(folder: Path) -> None:
    script = "CREATE TEMP VIEW v AS FROM 'dwell/month_1.parquet'; SELECT count(*) FROM v"
    ask(script)
    with Session(folder=folder) as session:
        assert session.query(script).from_store is not None
        # The next question needs the view that the first did without.
        assert session.query("SELECT count(*) + 1 FROM v").rows() == [(100,)]


def test_attached_sources_are_inputs(folder: Path) -> None:
    town = folder / "town.duckdb"
    with duckdb.connect(town) as made:
        made.execute("CREATE TABLE stops AS SELECT 1.5 AS a")
    settled(town)
    sql = "SELECT mad_scale(a), max(a) FROM town.stops"
    assert ask(sql, sources={"town": town}).from_store is None
    assert ask(sql, sources={"town": town}).from_store is not None
    with duckdb.connect(town) as made:
        made.execute("INSERT INTO stops VALUES (7)")
    settled(town)
    changed = ask(sql, sources={"town": town})
    assert (changed.from_store, changed.rows()[0][1]) == (None, 7)


@pytest.mark.usefixtures("folder")
def test_recompute_and_no_store() -> None:
    sql = SQL.format("dwell/*.parquet")
    first = ask(sql)
    assert ask(sql, recompute=True).from_store is None
    assert ask(sql, use_store=False).from_store is None
    kept = ask(sql)
    assert kept.from_store is not None and kept.table.equals(first.table)


@pytest.mark.usefixtures("folder")
def test_a_version_of_a_function_belongs_to_the_question(monkeypatch: pytest.MonkeyPatch) -> None:
    from dataclasses import replace

    from midspread.engine import session as module

    sql = SQL.format("dwell/*.parquet")
    ask(sql)
    functions = dict(module.functions())
    functions["mad_scale"] = replace(functions["mad_scale"], version=99)
    monkeypatch.setattr(module, "functions", lambda: functions)
    assert ask(sql).from_store is None
    functions["trimean"] = replace(functions["trimean"], version=99)
    assert ask(sql).from_store is not None, "another function's version does not matter"


class TestUnusableStores:
    """The answer comes all the same, unless the user named the store."""

    def test_some_other_file(self, folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
        other = folder / "midspread.duckdb"
        other.write_text("a diary")
        answer = ask("SELECT 42")
        assert answer.rows() == [(42,)]
        (notice,) = answer.notices
        assert notice.startswith("cache off: ") and "midspread.duckdb" in notice
        with pytest.raises(NotAStore):
            ask("SELECT 42", store=other)
        monkeypatch.setenv("MIDSPREAD_STORE", str(other))
        with pytest.raises(NotAStore):
            ask("SELECT 42")
        assert other.read_text() == "a diary"
        assert sorted(path.name for path in folder.iterdir()) == ["dwell", "midspread.duckdb"]

    @pytest.mark.skipif(os.name == "nt" or os.geteuid() == 0, reason="needs a user without rights")
    def test_a_folder_that_cannot_be_written(self, folder: Path) -> None:
        folder.chmod(0o500)
        try:
            answer = ask("SELECT 42")
        finally:
            folder.chmod(0o700)
        assert answer.rows() == [(42,)]
        assert answer.notices[0].startswith("cache off: ")

    def test_a_store_that_cannot_be_opened_now(
        self, folder: Path, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        ask("SELECT 42")

        def busy(*_: object, **__: object) -> Store:
            raise StoreBusy("the store is held by another program.")

        monkeypatch.setattr(Store, "open", busy)
        for named in (None, folder / "midspread.duckdb"):
            answer = ask("SELECT 42", store=named)
            assert answer.notices == ["cache off: the store is held by another program."]
            assert answer.rows() == [(42,)]

    def test_a_store_that_fails_while_keeping(
        self, folder: Path, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        from midspread.engine.store.answers import Answers

        def full(*_: object, **__: object) -> bool:
            raise StoreError("the disk is full.")

        monkeypatch.setattr(Answers, "keep", full)
        answer = ask("SELECT 42", folder=folder)
        assert answer.rows() == [(42,)]
        assert answer.notices == ["cache off: the disk is full."]


def test_a_kept_answer_needs_no_heavy_library(folder: Path) -> None:
    sql = SQL.format("dwell/*.parquet")
    ask(sql)
    program = (
        "import sys\n"
        "from midspread.engine.session import Session\n"
        f"answer = Session().query({sql!r})\n"
        "assert answer.from_store is not None\n"
        "heavy = {'numba', 'scipy', 'pandas', 'sqlglot', 'midspread.engine.rewriting',\n"
        "         'midspread.engine.messages', 'midspread.udfs.binding.registration'}\n"
        "assert not heavy & sys.modules.keys(), heavy & sys.modules.keys()\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", program], cwd=folder, capture_output=True, text=True, check=False
    )
    assert (done.returncode, done.stderr) == (0, "")


def test_a_change_of_the_search_path_is_not_kept(folder: Path) -> None:
    town = folder / "town.duckdb"
    with duckdb.connect(town) as made:
        made.execute("CREATE TABLE stops AS SELECT 1.5 AS a")
    settled(town)
    for _ in range(2):
        answer = ask("USE town; SELECT max(a) FROM stops", sources={"town": town})
        assert (answer.from_store, answer.rows()[0][0]) == (None, 1.5)
