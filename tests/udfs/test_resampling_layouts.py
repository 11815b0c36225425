"""Every function that draws: the same bits for any threads, order and split of files."""

from pathlib import Path
from typing import Any

import duckdb
import pytest

from midspread.udfs import register
from tests.udfs.calling import bits

VISITS = """
    SELECT i AS visit, 'L' || i % 3 AS route, hash(i) % 7 AS vehicle,
        CASE WHEN i % 29 = 0 THEN NULL ELSE exp((hash(i) % 6000) / 1500.0) END AS dwell_s,
        1 + hash(i * 31) % 40 AS boardings,
        CASE WHEN hash(i + 1) % 3 = 0 THEN 'cash box' ELSE 'tap reader' END AS payment
    FROM range(4000) AS t(i)
"""
GROUPED = (
    "bootstrap_interval(dwell_s, resamples := 50, seed := {})",
    "bootstrap_interval(dwell_s, 'sd', resamples := 50, seed := {})",
    "bootstrap_interval_yx(dwell_s, boardings, resamples := 20, seed := {})",
    "bootstrap_units(dwell_s, vehicle, resamples := 50, seed := {})",
    "bootstrap_blocks(dwell_s, visit, resamples := 50, seed := {})",
    "permutation_test(dwell_s, payment, resamples := 200, seed := {})",
    "permutation_test(dwell_s, payment, 'median', resamples := 200, seed := {})",
    "permutation_test_k(dwell_s, vehicle, resamples := 50, seed := {})",
    "sign_flip_test(dwell_s - 13.4, resamples := 200, seed := {})",
    "permutation_test_yx(dwell_s, boardings, resamples := 20, seed := {})",
)
TABLES = (
    "bootstrap_draws('{}', 'dwell_s', \"by\" := 'route', resamples := 20, seed := {})",
    "held_out_errors('{}', 'dwell_s', \"by\" := 'route', seed := {})",
    "bootstrap_expression('{}', 'trimmed_mean(dwell_s) / median(boardings)', \"by\" := 'route', "
    "resamples := 30, seed := {})",
)


def answers(source: str, threads: int, seed: int = 0) -> list[Any]:
    with duckdb.connect(config={"threads": threads}) as connection:
        register(connection, threads=threads)
        calls = ", ".join(call.format(seed) for call in GROUPED)
        found = [
            connection.execute(
                f"SELECT route, {calls} FROM '{source}' GROUP BY route ORDER BY route"
            ).fetchall()
        ]
        found += [
            connection.execute(f"FROM {call.format(source, seed)} ORDER BY ALL").fetchall()
            for call in TABLES
        ]
    return found


@pytest.fixture(scope="module")
def whole(tmp_path_factory: pytest.TempPathFactory) -> str:
    path = tmp_path_factory.mktemp("visits") / "visits.parquet"
    with duckdb.connect() as connection:
        connection.execute(f"COPY ({VISITS}) TO '{path}'")
    return str(path)


@pytest.fixture(scope="module")
def reference(whole: str) -> list[Any]:
    return answers(whole, threads=1)


@pytest.mark.parametrize("threads", [2, 4])
def test_same_bits_of_shuffled_and_split_files(
    whole: str, reference: list[Any], tmp_path: Path, threads: int
) -> None:
    with duckdb.connect() as connection:
        for part in range(3):
            connection.execute(
                f"COPY (FROM '{whole}' WHERE hash(visit * 7) % 3 = {part} ORDER BY hash(visit)) "
                f"TO '{tmp_path / f'part-{(part + 1) % 3}.parquet'}'"
            )
    assert bits(answers(f"{tmp_path}/*.parquet", threads)) == bits(reference)


def test_another_seed_draws_otherwise(whole: str, reference: list[Any]) -> None:
    other = answers(whole, threads=2, seed=1)
    for place, call in enumerate(GROUPED, start=1):
        assert any(
            mine[place] != its[place] for mine, its in zip(reference[0], other[0], strict=True)
        ), call
    for mine, its, call in zip(reference[1:], other[1:], TABLES, strict=True):
        assert mine != its, call
