"""Reports, checks and packing."""

from pathlib import Path

import duckdb
import pytest

from midspread.engine.errors import StoreBusy, StoreError
from midspread.engine.store.answers import Answers
from midspread.engine.store.housekeeping import check, pack, report
from midspread.engine.store.quoting import literal, quoted
from midspread.engine.store.store import Store

from .conftest import noise, small_table


def test_a_report_counts(store: Store, answers: Answers) -> None:
    empty = report(store)
    assert (empty.answers, empty.answer_bytes, empty.oldest) == (0, 0, None)
    answers.keep("a", "SELECT 1", small_table())
    answers.keep("b", "SELECT 1", noise(100_000))
    full = report(store)
    assert full.answers == 2
    assert full.answer_bytes == answers.size_bytes() > 100_000
    assert full.file_bytes == store.path.stat().st_size
    assert full.limit_bytes == 1 << 30
    assert full.oldest is not None
    assert full.newest is not None
    assert full.oldest <= full.newest
    assert full.path == store.path


def test_faults_are_found(store: Store, answers: Answers) -> None:
    for key in "abcd":
        answers.keep(key, "SELECT 1", small_table())
    with store.writing() as engine:
        engine.execute("UPDATE store.answers.shelf_1 SET content = 'x' WHERE answer = 1")
        engine.execute("DELETE FROM store.answers.shelf_1 WHERE answer = 2")
        engine.execute("UPDATE store.ledger.answers SET key = 'd', row_count = 9 WHERE answer = 3")
        engine.execute("INSERT INTO store.answers.shelf_1 VALUES (77, 0, NULL, 'y')")
        engine.execute("CREATE TABLE store.answers.shelf_9 (answer BIGINT)")
    faults = check(store)
    for words in (
        "Answer 1 cannot be read",
        "Answer 2 has lost a part",
        "Answer 3 has 3 rows where 9",
        "Key d is kept 2 times",
        "Shelf 1 holds 1 answers that are not listed",
        "Shelf 9 holds no answer",
    ):
        assert any(words in fault for fault in faults), (words, faults)
    assert len(faults) == 6


def test_packing_gives_room_back_and_keeps_all(store: Store, answers: Answers) -> None:
    for number in range(20):
        answers.keep(f"k{number}", "SELECT 1", noise(300_000))
    with store.writing() as engine:
        engine.execute("CREATE TABLE store.main.limits AS SELECT 12 AS route, 45.0 AS limit_s")
        engine.execute("CREATE VIEW store.main.routes AS SELECT route FROM store.main.limits")
        engine.execute("CREATE MACRO store.main.doubled(a) AS a * 2")
    answers.keep("k", "SELECT 1", small_table())
    answers.set_limit(400_000)
    answers.set_limit(1 << 30)
    assert answers.count() == 2
    before = store.path.stat().st_size
    given_back = pack(store)
    assert store.path.stat().st_size == before - given_back < before
    kept = answers.find("k")
    assert kept is not None
    assert kept.table == small_table()
    assert check(store) == []
    assert answers.keep("l", "SELECT 2", small_table())
    with duckdb.connect(store.path, read_only=True) as anybody:
        assert anybody.execute("SELECT doubled(route) FROM limits").fetchall() == [(24,)]
        assert anybody.execute("SELECT * FROM routes").fetchall() == [(12,)]
    assert int.from_bytes(store.path.read_bytes()[12:20], "little") == 64
    assert not list(store.path.parent.glob("*.new*"))


def test_packing_a_store_in_use_leaves_it(store: Store, answers: Answers) -> None:
    answers.keep("k", "SELECT 1", small_table())
    with duckdb.connect() as session:
        session.execute(f"ATTACH '{store.path}' AS mine (READ_ONLY)")
        before = store.path.read_bytes()
        with pytest.raises(StoreBusy):
            pack(store)
        assert store.path.read_bytes() == before
    assert not list(store.path.parent.glob("*.new*"))


def test_packing_another_file_leaves_it(tmp_path: Path) -> None:
    path = tmp_path / "notes.txt"
    path.write_text("not a store, and longer than a header")
    with pytest.raises(StoreError):
        pack(Store(path))
    assert [p.name for p in tmp_path.iterdir()] == ["notes.txt"]


@pytest.mark.parametrize("text", ["", "a", "it's", 'say "so"', "x'; DROP TABLE t; --", "\\", "é\n"])
def test_quoting(text: str) -> None:
    engine = duckdb.connect()
    assert engine.execute(f"SELECT {literal(text)}").fetchall() == [(text,)]
    if text:
        result = engine.execute(f"SELECT 1 AS {quoted(text)}")
        assert [d[0] for d in result.description or []] == [text]
