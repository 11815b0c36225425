"""The SQL macros of chance: exact integers, exact normal quantiles, streams that do not touch."""

import math
from collections.abc import Iterator
from statistics import NormalDist

import duckdb
import pytest

from midspread.demo_db.generator import SALTS, equip

WORD = 2**32


@pytest.fixture(scope="module")
def connection() -> Iterator[duckdb.DuckDBPyConnection]:
    with duckdb.connect(":memory:", config={"threads": 1}) as connection:
        equip(connection, 1_000)
        yield connection


def mixed(word: int) -> int:
    # the function as printed, in C, in the README of github.com/skeeto/hash-prospector
    word ^= word >> 15
    word = word * 0x2C1B3C6D % WORD
    word ^= word >> 12
    word = word * 0x297A2D39 % WORD
    return word ^ word >> 15


def test_mixing_is_the_published_32_bit_function(connection: duckdb.DuckDBPyConnection) -> None:
    words = [0, 1, 2, 3, 65_535, 65_536, 2**31, WORD - 1, *range(7, WORD, 100_000_007)]
    got = connection.execute(
        "SELECT larkmoor_mixed(word) FROM (SELECT unnest(?::UBIGINT[]) AS word)", [words]
    ).fetchall()
    assert [value for (value,) in got] == [mixed(word) for word in words]


def test_normal_quantile_is_that_of_the_standard_library(
    connection: duckdb.DuckDBPyConnection,
) -> None:
    # statistics.NormalDist.inv_cdf of CPython implements the same algorithm, AS 241
    words = [*range(500), *range(WORD - 500, WORD), *range(0, WORD, 1_000_003)]
    probs = [(word + 0.5) / WORD for word in words]
    got = connection.execute(
        "SELECT larkmoor_normal_quantile(prob) FROM (SELECT unnest(?::DOUBLE[]) AS prob)", [probs]
    ).fetchall()
    inverse = NormalDist().inv_cdf
    for prob, (z,) in zip(probs, got, strict=True):
        assert math.isclose(z, inverse(prob), rel_tol=1e-14, abs_tol=1e-16)


def test_every_draw_is_uniform_and_unrelated_to_the_others(
    connection: duckdb.DuckDBPyConnection,
) -> None:
    n = 50_000
    draws = ", ".join(
        f"larkmoor_uniform(larkmoor_mixed(visit::UBIGINT), {salt}) AS {name}"
        for name, salt in SALTS.items()
    )
    connection.execute(f"CREATE TEMP TABLE draws AS SELECT {draws} FROM range(1, {n + 1}) t(visit)")
    for name in SALTS:
        counts = connection.execute(
            f"SELECT count(*) FROM draws GROUP BY floor({name} * 50) ORDER BY 1"
        ).fetchall()
        chi_square = sum((count - n / 50) ** 2 / (n / 50) for (count,) in counts)
        # chi-square with 49 degrees of freedom: mean 49, sd 9.9; five of those
        assert len(counts) == 50 and chi_square < 49 + 5 * math.sqrt(98), (name, chi_square)
    for first in SALTS:
        others = [other for other in SALTS if other > first]
        if others:
            query = ", ".join(f"corr({first}, {other})" for other in others)
            row = connection.execute(f"SELECT {query} FROM draws").fetchone()
            assert row is not None
            assert max(map(abs, row)) < 5 / math.sqrt(n), first


def test_salts_differ() -> None:
    assert len(set(SALTS.values())) == len(SALTS)
    assert all(0 < salt < WORD for salt in SALTS.values())
