"""Permutation tests: the same bits again, other seeds, each group its own parameters, a stop."""

import threading
import time

import duckdb
import pytest

from midspread.udfs import register
from midspread.udfs.grouped import Control
from tests.udfs.calling import bits

CALLS = (
    "permutation_test(x, label, resamples := 3000)",
    "permutation_test(x, label, studentize := true, stratum := s, resamples := 500)",
    "permutation_test(x, label, 'median', resamples := 900)",
    "permutation_test(x, label, 'median', stratum := s, resamples := 300)",
    "permutation_test_k(x, s, resamples := 300)",
    "permutation_test_k(x, s, 'trimmed_mean(0.2)', stratum := label, resamples := 200)",
    "sign_flip_test(x - 12, resamples := 3000)",
    "sign_flip_test(x - 12, 'trimmed_mean(0.2)', resamples := 300)",
    "permutation_test_yx(x, s, resamples := 200)",
    "permutation_test_yx(x, v, 'kendall_tau', stratum := s, resamples := 100)",
)


@pytest.mark.parametrize("call", CALLS)
def test_same_bits_for_any_threads_and_any_order(call: str) -> None:
    found = []
    for threads, order in ((1, "i"), (2, "hash(i)"), (4, "-i")):
        with duckdb.connect(config={"threads": threads}) as connection:
            register(connection, threads=threads)
            connection.execute(
                "CREATE TABLE t AS SELECT CASE WHEN i < 30000 THEN 0 ELSE 1 + i % 40 END AS g, "
                "(hash(i) % 200) / 8.0 AS x, (hash(i + 3) % 50)::DOUBLE AS v, "
                "CASE WHEN hash(i + 1) % 10 < 3 THEN 'a' ELSE 'b' END AS label, "
                "hash(i + 2) % 4 AS s "
                f"FROM range(31500) AS r(i) ORDER BY {order}"
            )
            rows = connection.execute(f"SELECT g, {call} FROM t GROUP BY g ORDER BY g").fetchall()
            found.append(bits(rows))
            if threads == 1:
                alone = connection.execute(f"SELECT {call} FROM t WHERE g = 7").fetchall()
                assert bits(alone[0][0]) == bits(rows[7][1]), "whatever else is in the batch"
    assert found[0] == found[1] == found[2]


@pytest.mark.parametrize("call", CALLS)
def test_seeds_differ(connection: duckdb.DuckDBPyConnection, call: str) -> None:
    source = (
        "(SELECT (hash(i) % 200) / 8.0 AS x, hash(i + 3) % 50 AS v, hash(i + 2) % 4 AS s, "
        "hash(i + 1) % 10 < 3 AS label FROM range(200) AS r(i))"
    )
    seeded = [call[:-1] + f", seed := {seed})" for seed in (0, 1, 2, 0)]
    query = f"SELECT {', '.join(seeded)} FROM {source}"
    (found,) = connection.execute(query).fetchall()
    assert found[0] == found[3]
    assert len({answer["p_value"] for answer in found}) > 1


def test_each_group_uses_its_own_parameters(connection: duckdb.DuckDBPyConnection) -> None:
    source = (
        "(SELECT i % 3 AS g, (hash(i) % 100)::DOUBLE AS x, i % 7 < 3 AS label "
        "FROM range(120) AS r(i))"
    )
    own = "CASE g WHEN 0 THEN {} WHEN 1 THEN {} ELSE {} END"
    settings_ = {
        "statistic": ("'mean'", "'median'", "'mean'"),
        "alternative": ("'greater'", "'less'", "'two-sided'"),
        "resamples": (100, 200, 300),
        "seed": (1, 2, 3),
    }
    given_ = ", ".join(f"{k} := {own.format(*v)}" for k, v in settings_.items())
    query = f"SELECT permutation_test(x, label, {given_}) FROM {source} GROUP BY g ORDER BY g"
    together = [row[0] for row in connection.execute(query).fetchall()]
    for g in range(3):
        spelt = ", ".join(f"{k} := {v[g]}" for k, v in settings_.items())
        query = f"SELECT permutation_test(x, label, {spelt}) FROM {source} WHERE g = {g}"
        assert bits(connection.execute(query).fetchall()[0][0]) == bits(together[g])


@pytest.mark.parametrize("statistic", ["mean", "median"])
def test_stops_when_asked(statistic: str) -> None:
    """Far more work than the test waits for; the counter moves while it lasts."""
    control = Control()
    with duckdb.connect() as connection:
        register(connection, control=control, threads=2)
        short = (
            f"SELECT permutation_test(i, i % 2, '{statistic}', resamples := 30) FROM range(99) t(i)"
        )
        connection.execute(short).fetchall()  # compiled before the clock runs
        failures: list[BaseException] = []

        def ask_for_long() -> None:
            try:
                connection.execute(
                    f"SELECT permutation_test(hash(i) % 1000, i % 2, '{statistic}', "
                    "resamples := 10000000) FROM range(300000) t(i)"
                ).fetchall()
            except duckdb.Error as failure:
                failures.append(failure)

        asking = threading.Thread(target=ask_for_long)
        asking.start()
        seen = {control.done}
        limit = time.monotonic() + 60
        while len(seen) < 4 and time.monotonic() < limit:
            time.sleep(0.1)
            seen.add(control.done)
        control.stop()
        asking.join(60)
        assert not asking.is_alive() and len(seen) == 4
        assert failures and "stopped" in str(failures[0])
