"""Table functions answer in the same bits for any number of threads and order of rows."""

import duckdb
import pytest

from midspread.udfs import register
from tests.udfs.calling import bits
from tests.udfs.table_calls import answer

CALLS = [
    "power_ladder('visits', 'dwell_s', by := 'route')",
    "spread_by_level('visits', 'dwell_s', 'vehicle', by := 'route')",
    "straightening_pairs('visits', 'dwell_s', 'boardings', by := 'route', powers := [0, 1])",
    "heaping('visits', 'dwell_s', by := 'route')",
    "decile_shifts('visits', 'dwell_s', 'vehicle % 2', by := 'route', resamples := 9)",
]


@pytest.mark.parametrize("call", CALLS, ids=lambda call: call.partition("(")[0])
def test_the_same_bits(call: str) -> None:
    found = []
    for threads, order in ((1, "i"), (2, "hash(i)"), (4, "dwell_s, hash(i + 3)")):
        with duckdb.connect(config={"threads": threads}) as connection:
            register(connection)
            connection.execute(
                "CREATE TABLE visits AS SELECT i % 7 AS route, hash(i * 3) % 12 AS vehicle, "
                'vehicle % 2 AS "vehicle % 2", '
                "round(30 * exp((hash(i) % 4001) / 2000.0 - 1), 1) AS dwell_s, "
                "CASE WHEN i % 31 > 0 THEN hash(i * 5) % 90 + dwell_s / 9 END AS boardings "
                f"FROM range(30000) t(i) ORDER BY {order}"
            )
            found.append(bits(answer(connection, f"FROM {call}")))
    assert found[0] == found[1] == found[2] and found[0]
