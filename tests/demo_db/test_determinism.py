"""The same number of visits gives the same bits."""

import hashlib
from pathlib import Path

import duckdb
import pytest

from midspread.demo_db import Demo, build, create_truth_view
from midspread.demo_db.generator import VISIT_COLUMNS


def file_digests(demo: Demo) -> dict[str, str]:
    return {
        file.name: hashlib.sha256(file.read_bytes()).hexdigest()
        for file in sorted((demo.folder / "dwell").iterdir())
    }


def content_digest(rows: list[tuple[object, ...]]) -> str:
    digest = hashlib.sha256()
    for row in rows:
        digest.update(repr(tuple(map(str, row))).encode())
    return digest.hexdigest()


def visits_of(demo: Demo) -> list[tuple[object, ...]]:
    with duckdb.connect(":memory:") as connection:
        return connection.execute(
            f"SELECT {', '.join(VISIT_COLUMNS)} FROM read_parquet(?) ORDER BY visit", [demo.dwell]
        ).fetchall()


def warehouse_of(demo: Demo) -> list[list[tuple[object, ...]]]:
    with duckdb.connect(str(demo.warehouse), read_only=True) as connection:
        return [
            connection.execute(f"FROM {table}").fetchall()
            for table in ("routes", "stops", "vehicles")
        ]


@pytest.mark.parametrize("threads", [1, 3, None])
def test_threads_and_repetition_change_nothing(
    tmp_path: Path, demo: Demo, threads: int | None
) -> None:
    again = build(tmp_path / "again", visits=demo.visits, threads=threads)
    assert not again.reused
    assert file_digests(again) == file_digests(demo)
    assert warehouse_of(again) == warehouse_of(demo)


@pytest.mark.parametrize("threads", [1, 4])
def test_truth_view_holds_the_visits_of_the_files(demo: Demo, threads: int) -> None:
    with duckdb.connect(":memory:", config={"threads": threads}) as connection:
        create_truth_view(connection, demo.visits, 'with "truth"')
        generated = connection.execute(
            f'SELECT {", ".join(VISIT_COLUMNS)} FROM "with ""truth""" ORDER BY visit'
        ).fetchall()
    assert generated == visits_of(demo)


def test_content_is_pinned(tmp_path: Path) -> None:
    # Kept from the first edition: where this changes on purpose, raise folders.EDITION as well.
    demo = build(tmp_path / "pinned", visits=5_000)
    assert content_digest(visits_of(demo)) == PINNED


PINNED = "7756bb1d24848b60f7ca3789916e9eecf6e45621619d05ea2232b145762a3e55"
