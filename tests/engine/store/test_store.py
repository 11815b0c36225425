"""The store's file: made, opened, refused, never harmed."""

import os
import re
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import duckdb
import pytest

from midspread.engine.errors import (
    NotAStore,
    StoreBusy,
    StoreDamaged,
    StoreError,
    StoreNotWritable,
    StoreTooNew,
)
from midspread.engine.store.answers import Answers
from midspread.engine.store.locking import lock_path, locked
from midspread.engine.store.store import Store

from .conftest import HOLD, give_up_writing, nobody, noise, other_database, small_table

Start = Callable[..., "subprocess.Popen[str]"]


def test_a_missing_store_is_made_and_holds_nothing_open(path: Path) -> None:
    store = Store.open(path)
    assert {p.name for p in path.parent.iterdir()} == {path.name, lock_path(path).name}
    with duckdb.connect(path) as anybody:
        assert anybody.execute("SELECT value FROM ledger.about WHERE name = 'format'").fetchall()
    assert Store.open(path).path == store.path


def test_other_clients_of_older_engines_can_open_the_file(store: Store) -> None:
    """Format 64 in the file's header is what DuckDB 0.10 to 1.1 read (its storage docs)."""
    Answers(store).keep("k", "SELECT 1", small_table())
    assert int.from_bytes(store.path.read_bytes()[12:20], "little") == 64


def test_a_log_left_by_a_store_that_is_gone_does_no_harm(path: Path) -> None:
    """As after a kill in mid-write, when only the database itself is then removed."""
    writing = (
        "import duckdb, os, sys\n"
        "engine = duckdb.connect(sys.argv[1])\n"
        "engine.execute('CREATE TABLE old (a INTEGER)'); engine.execute('CHECKPOINT')\n"
        "engine.execute('INSERT INTO old VALUES (1)'); os._exit(0)"
    )
    subprocess.run([sys.executable, "-c", writing, str(path)], check=True)
    log = path.with_name(f"{path.name}.wal")
    left = log.read_bytes()
    assert left
    path.unlink()

    answers = Answers(Store.open(path), environment={})
    answers.keep("k", "SELECT 1", small_table())
    assert answers.find("k") is not None
    (kept,) = path.parent.glob(f"{log.name}.*.left")
    assert kept.read_bytes() == left


def test_a_missing_store_is_not_made_unasked(path: Path) -> None:
    with pytest.raises(StoreError, match="no store at"):
        Store.open(path, create=False)
    assert list(path.parent.iterdir()) == []


def test_a_block_is_one_transaction(store: Store) -> None:
    with pytest.raises(ZeroDivisionError), store.writing() as engine:
        engine.execute("INSERT INTO store.ledger.about VALUES ('a', 'b')")
        raise ZeroDivisionError
    with store.reading() as engine:
        rows = engine.execute("SELECT * FROM store.ledger.about WHERE name = 'a'").fetchall()
    assert rows == []
    with store.writing() as engine:
        engine.execute("INSERT INTO store.ledger.about VALUES ('a', 'b')")
    with store.reading() as engine:
        rows = engine.execute("SELECT * FROM store.ledger.about WHERE name = 'a'").fetchall()
    assert rows == [("a", "b")]


def test_reading_cannot_write(store: Store) -> None:
    with pytest.raises(StoreError), store.reading() as engine:
        engine.execute("DELETE FROM store.ledger.about")
    with store.reading() as engine:
        assert engine.execute("SELECT count(*) FROM store.ledger.about").fetchall() != [(0,)]


OTHER_FILES = {
    "text": b"route,stop\n1,2\n" * 100,
    "empty": b"",
    "short": b"abc",
    "zip": b"PK\x03\x04" + bytes(5000),
    "sqlite": b"SQLite format 3\x00" + bytes(5000),
}


@pytest.mark.parametrize("kind", OTHER_FILES)
def test_some_other_file_is_refused_and_left(path: Path, kind: str) -> None:
    path.write_bytes(OTHER_FILES[kind])
    with pytest.raises(NotAStore, match="some other file"):
        Store.open(path)
    assert path.read_bytes() == OTHER_FILES[kind]
    assert [p.name for p in path.parent.iterdir()] == [path.name]


def test_a_folder_is_refused(path: Path) -> None:
    path.mkdir()
    with pytest.raises(NotAStore, match="is a folder"):
        Store.open(path)


def test_a_database_of_another_program_is_refused_and_left(path: Path) -> None:
    before = other_database(path)
    with pytest.raises(NotAStore, match="another program"):
        Store.open(path)
    assert path.read_bytes() == before
    assert [p.name for p in path.parent.iterdir()] == [path.name]


def test_a_newer_store_is_refused_and_left(store: Store) -> None:
    with store.writing() as engine:
        engine.execute("UPDATE store.ledger.about SET value = '99' WHERE name = 'format'")
    before = store.path.read_bytes()
    with pytest.raises(StoreTooNew, match="format 99"):
        Store.open(store.path)
    with pytest.raises(StoreTooNew):
        Answers(store).clear()
    assert store.path.read_bytes() == before


def test_a_file_of_a_newer_engine_is_refused_and_left(store: Store) -> None:
    """The header's version is raised, and its checksum set to what the engine says it must be."""
    content = bytearray(store.path.read_bytes())
    content[12:20] = (5000).to_bytes(8, "little")
    store.path.write_bytes(content)
    with pytest.raises(StoreDamaged) as damaged:
        Store.open(store.path)
    checksum = re.search(r"computed checksum (\d+)", str(damaged.value))
    assert checksum is not None
    content[0:8] = int(checksum[1]).to_bytes(8, "little")
    store.path.write_bytes(content)
    with pytest.raises(StoreTooNew, match="newer database engine"):
        Store.open(store.path)
    assert store.path.read_bytes() == content


def damage_half(content: bytes) -> bytes:
    return content[: len(content) // 2]


def damage_headers(content: bytes) -> bytes:
    return content[:4096] + bytes(8192) + content[12288:]


def damage_blocks(content: bytes) -> bytes:
    changed = bytearray(content)
    for place in range(12288, len(changed), 5000):
        changed[place] ^= 255
    return bytes(changed)


@pytest.mark.parametrize("damage", [damage_half, damage_headers, damage_blocks])
def test_a_damaged_store_is_refused_and_left(
    store: Store, damage: Callable[[bytes], bytes]
) -> None:
    Answers(store).keep("k", "SELECT 1", noise(1 << 20))
    content = damage(store.path.read_bytes())
    store.path.write_bytes(content)
    with pytest.raises(StoreDamaged, match="was left as it is") as error:
        Answers(Store.open(store.path)).find("k")
    assert "\n" not in str(error.value)
    with pytest.raises(StoreDamaged):
        Answers(store).keep("l", "SELECT 2", small_table())
    assert store.path.read_bytes() == content


def test_a_folder_that_is_missing(tmp_path: Path) -> None:
    with pytest.raises(StoreNotWritable, match="does not exist"):
        Store.open(tmp_path / "no" / "midspread.duckdb")
    assert list(tmp_path.iterdir()) == []


def test_a_folder_that_cannot_be_written() -> None:
    with nobody() as folder:
        give_up_writing(folder)
        with pytest.raises(StoreNotWritable, match="cannot be written"):
            Store.open(folder / "midspread.duckdb")
        assert list(folder.iterdir()) == []


@pytest.mark.parametrize("with_lock", [True, False])
def test_a_store_that_can_only_be_read_still_answers(with_lock: bool) -> None:
    with nobody() as folder:
        Answers(Store.open(folder / "midspread.duckdb")).keep("k", "SELECT 1", small_table())
        if not with_lock:
            lock_path(folder / "midspread.duckdb").unlink()
        give_up_writing(folder)
        answers = Answers(Store.open(folder / "midspread.duckdb"))
        kept = answers.find("k")
        assert kept is not None
        assert kept.table == small_table()
        with pytest.raises(StoreNotWritable):
            answers.keep("l", "SELECT 2", small_table())
        with pytest.raises(StoreNotWritable):
            answers.clear()


def test_a_store_that_cannot_even_be_read() -> None:
    with nobody() as folder:
        path = folder / "midspread.duckdb"
        Store.open(path)
        path.chmod(0)
        if os.geteuid() == 0:
            os.seteuid(65534)
        with pytest.raises(StoreError, match="cannot be read"):
            Store.open(path)


def test_a_store_that_vanishes(store: Store) -> None:
    store.path.unlink()
    with pytest.raises(StoreError, match="is gone"):
        Answers(store).find("k")
    assert not store.path.exists()


@pytest.mark.parametrize("mode", ["reading", "writing"])
def test_another_program_that_holds_the_store(store: Store, start: Start, mode: str) -> None:
    Answers(store).keep("k", "SELECT 1", small_table())
    other = start(HOLD, store.path, mode, "-")
    assert other.stdout is not None
    assert other.stdout.readline() == "held\n"
    began = time.monotonic()
    with pytest.raises(StoreBusy, match="in use by another program"):
        Answers(store).clear()
    assert 2 < time.monotonic() - began < 10
    if mode == "reading":
        assert Answers(store).find("k") is not None
    other.communicate("\n")
    assert Answers(store).find("k") is not None


def test_another_program_that_holds_the_store_for_a_moment(store: Store, start: Start) -> None:
    other = start(HOLD, store.path, "writing", 0.5)
    assert other.stdout is not None
    assert other.stdout.readline() == "held\n"
    assert Answers(store).find("k") is None


def test_the_store_open_in_this_process_by_somebody_else(store: Store) -> None:
    with duckdb.connect() as session:
        session.execute(f"ATTACH '{store.path}' AS mine (READ_ONLY)")
        with pytest.raises(StoreBusy):
            Answers(store).clear()
    assert Answers(store).clear() == 0


FULL = """
import resource, signal, sys
from pathlib import Path
import pyarrow as pa, os
from midspread.engine.errors import StoreError
from midspread.engine.store.answers import Answers
from midspread.engine.store.store import Store
signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
path = Path(sys.argv[1])
most = int(sys.argv[2])
resource.setrlimit(resource.RLIMIT_FSIZE, (most, most))
try:
    answers = Answers(Store.open(path))
    answers.keep("big", "SELECT 2", pa.table({"a": [os.urandom(8 << 20)]}))
except StoreError as error:
    print(type(error).__name__, error)
"""


def test_a_full_disk_leaves_the_store_as_it_was(store: Store, start: Start) -> None:
    """A limit on the size of files stands for the full disk: the writes fail alike."""
    Answers(store).keep("k", "SELECT 1", small_table())
    out, err = start(FULL, store.path, store.path.stat().st_size + 300_000).communicate(timeout=60)
    assert out.startswith("StoreError The disk is too full"), out + err
    answers = Answers(store)
    assert answers.find("big") is None
    kept = answers.find("k")
    assert kept is not None
    assert kept.table == small_table()
    assert answers.keep("l", "SELECT 3", small_table())


def test_a_disk_too_full_to_make_a_store(path: Path, start: Start) -> None:
    out, err = start(FULL, path, 20_000).communicate(timeout=60)
    assert out.startswith("StoreError The disk is too full"), out + err
    assert list(path.parent.iterdir()) == []


def test_the_lock_survives_the_removal_of_its_file(path: Path) -> None:
    with locked(path, shared=False, wait_s=1):
        lock_path(path).unlink()
    with locked(path, shared=False, wait_s=1):
        assert lock_path(path).exists()


def test_a_lock_not_got_in_time_is_an_error(store: Store, start: Start) -> None:
    holder = """
import sys
from pathlib import Path
from midspread.engine.store.locking import locked
with locked(Path(sys.argv[1]), shared=sys.argv[2] == "shared", wait_s=1):
    print("held", flush=True)
    sys.stdin.readline()
"""
    other = start(holder, store.path, "shared")
    assert other.stdout is not None
    assert other.stdout.readline() == "held\n"
    with store.reading(wait_s=0.1):
        pass
    with pytest.raises(StoreBusy), store.writing(wait_s=0.1):
        pass
    other.kill()
    other.wait()
    with store.writing(wait_s=1):
        pass
