"""`influential_values`: equal to leaving out each value by hand, in ranges, at any size."""

import math
from typing import Any

import duckdb
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from midspread.udfs import register
from midspread.udfs.resampling.statistics import read_statistic
from tests.udfs.calling import bits
from tests.udfs.table_calls import answer, complaint

FAST = (
    *("mean", "median", "trimmed_mean(0.2)", "trimmed_mean(0.49)", "winsorized_mean(0.1)"),
    *("winsorized_mean(0.3)", "trimean", "quantile_hf(0.9, 6)", "iqr_scale", "bowley_skew"),
)
SLOW = ("huber_location", "sd", "hodges_lehmann")
NUMBERS = st.one_of(
    st.integers(-4, 4).map(float),
    st.floats(-100, 100).map(lambda v: round(v, 3)),
    st.sampled_from([math.inf, -math.inf, 1e12, -1e12]),
)


def influential(
    connection: duckdb.DuckDBPyConnection, values: list[float], statistic: str, top: int = 1000
) -> list[dict[str, Any]]:
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE given AS SELECT unnest(?::DOUBLE[]) AS x", [values]
    )
    return answer(
        connection,
        f"FROM influential_values('given', 'x', statistic := '{statistic}', top := {top})",
    )


def by_hand(values: list[float], statistic: str) -> float | None:
    """The kernel, in plain Python, on these values alone."""
    known = read_statistic("test", statistic)
    x = np.sort(np.array(values))
    if x.size < known.function.smallest_n:
        return None
    assert known.function.kernel is not None
    with np.errstate(all="ignore"):
        return float(known.function.kernel(x, *known.parameters))


def agree(found: float | None, expected: float | None, scale: float) -> bool:
    if found is None or expected is None or math.isnan(expected):
        # The kernels' NULL is a NaN in plain Python.
        return found is None or (expected is not None and math.isnan(found))
    return found == expected or abs(found - expected) <= 1e-12 * scale


@settings(max_examples=60, deadline=None)
@given(st.lists(NUMBERS, min_size=1, max_size=30), st.sampled_from([*FAST, *SLOW]))
def test_as_by_hand(
    connection: duckdb.DuckDBPyConnection, values: list[float], statistic: str
) -> None:
    rows = influential(connection, values, statistic)
    assert sum(row["count"] for row in rows) == len(values)
    everything = by_hand(values, statistic)
    scale = max([1.0, *(abs(v) for v in values if math.isfinite(v))])
    for row in rows:
        inside = [v for v in values if row["lowest"] <= v <= row["highest"]]
        assert len(inside) == row["count"]
        for value in set(inside):
            rest = list(values)
            rest.remove(value)
            expected = by_hand(rest, statistic)
            assert agree(row["estimate_without"], expected, scale)
            if everything is None or expected is None:
                assert row["change"] is None and row["rank"] is None
            elif math.isfinite(everything) and math.isfinite(expected):
                assert agree(row["change"], expected - everything, scale)
            elif expected == everything:
                assert row["change"] == 0.0
    sizes = [abs(r["change"]) for r in rows if r["change"] is not None]
    finite = [size for size in sizes if not math.isnan(size)]
    assert finite == sorted(finite, reverse=True)


@pytest.mark.parametrize("statistic", ["mean", "trimmed_mean(0.2)", "winsorized_mean(0.2)"])
def test_top_cuts_the_list(connection: duckdb.DuckDBPyConnection, statistic: str) -> None:
    values = [float(i * i % 101) for i in range(80)]
    everything = influential(connection, values, statistic)
    for top in (1, 2, 7, 1000):
        assert influential(connection, values, statistic, top) == everything[:top]
    assert everything[0]["rank"] == 1
    for row in everything:
        larger = sum(abs(other["change"]) > abs(row["change"]) for other in everything)
        assert row["rank"] == larger + 1


def test_whole_tails_are_one_range(connection: duckdb.DuckDBPyConnection) -> None:
    """Of 1 … 20, four are cut from each end: one of 1 … 4 gone, 5 is cut in its place."""
    rows = influential(connection, [float(i) for i in range(1, 21)], "trimmed_mean(0.2)")
    ranges = {(row["lowest"], row["highest"], row["count"]) for row in rows}
    assert (1.0, 4.0, 4) in ranges and (17.0, 20.0, 4) in ranges
    assert all(low == high for low, high, _ in ranges if (low, high) not in {(1, 4), (17, 20)})


def test_outliers_mask_each_other(connection: duckdb.DuckDBPyConnection) -> None:
    """What the help warns of: one stuck clock gone changes nothing, and two change the median."""
    clocks = [20.0] * 3 + [6553.5] * 5
    stuck = [row for row in influential(connection, clocks, "median") if row["highest"] == 6553.5]
    assert [row["change"] for row in stuck] == [0.0]
    assert by_hand(clocks, "median") == 6553.5
    assert by_hand(clocks[:-2], "median") == 3286.75


def test_change_keeps_its_digits(connection: duckdb.DuckDBPyConnection) -> None:
    """Among a million values, shifted by 1e9: each change is (mean − x) / (n − 1)."""
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE large AS SELECT 1e9 + i / 8 AS shifted, i / 8 AS x "
        "FROM range(1000001) t(i)"
    )
    for column, shift in (("x", 0.0), ("shifted", 1e9)):
        first, second, *_ = answer(
            connection, f"FROM influential_values('large', '{column}', statistic := 'mean')"
        )
        assert first["lowest"] == shift and second["highest"] == shift + 125000.0
        assert first["change"] == pytest.approx(62500.0 / 1000000, rel=1e-14)
        assert second["change"] == pytest.approx(-62500.0 / 1000000, rel=1e-14)


def test_a_wild_value_leaves_no_trace(connection: duckdb.DuckDBPyConnection) -> None:
    rows = influential(connection, [0.1, 0.2, 0.3, 0.4, 0.5, 1e15], "mean")
    assert rows[0]["lowest"] == 1e15
    assert rows[0]["estimate_without"] == pytest.approx(0.3, rel=1e-15)


def test_nan_and_too_few(connection: duckdb.DuckDBPyConnection) -> None:
    (row,) = influential(connection, [1.0, math.nan, 3.0], "mean")
    assert row["count"] == 3 and row["rank"] is None
    assert all(math.isnan(row[name]) for name in ("estimate", "estimate_without", "change"))
    (row,) = influential(connection, [5.0], "mean")
    assert (row["estimate"], row["estimate_without"], row["change"]) == (5.0, None, None)
    (row,) = influential(connection, [0.1] * 9, "trimmed_mean(0.2)")
    assert (row["count"], row["estimate_without"], row["change"]) == (9, 0.1, 0.0)
    (row,) = influential(connection, [1.0, 5.0], "sd")
    assert row["change"] is None and row["count"] == 2


def test_the_same_bits_for_any_order_and_number_of_threads() -> None:
    found = []
    for threads, order in ((1, "i"), (3, "hash(i)")):
        with duckdb.connect(config={"threads": threads}) as connection:
            register(connection)
            connection.execute(
                "CREATE TABLE visits AS SELECT i % 7 AS route, (hash(i * 5) % 4001) / 10.0 "
                f"AS dwell_s FROM range(30000) t(i) ORDER BY {order}"
            )
            found.append(
                [
                    [
                        bits(row)
                        for row in answer(
                            connection,
                            "FROM influential_values('visits', "
                            f"'dwell_s', by := 'route', statistic := '{statistic}')",
                        )
                    ]
                    for statistic in ("trimmed_mean(0.2)", "winsorized_mean(0.1)", "huber_location")
                ]
            )
    assert found[0] == found[1]


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        ("top := 0", "top must be a whole number from 1 to 1e+06, got 0;"),
        ("top := 2.5", "top must be a whole number from 1 to 1e+06, got 2.5;"),
        ("top := NULL", "top must be a whole number from 1 to 1e+06, got NULL;"),
        ("statistic := 'mode'", "statistic must be one of mean, median, sd, "),
        ("statistic := NULL", "statistic must be a text, got NULL;"),
        ("statistic := 'trimmed_mean(0.7)'", "trimmed_mean: share must be a number"),
        ("by := 'rank'", "by names rank, which is also a column of the result;"),
    ],
)
def test_wrong_arguments(
    larkmoor: duckdb.DuckDBPyConnection, arguments: str, sentence: str
) -> None:
    said = complaint(larkmoor, f"FROM influential_values('visits', 'dwell_s', {arguments})")
    assert said.startswith(f"influential_values: {sentence}")
    assert said.endswith(".")


def test_too_many_values_for_a_statistic(connection: duckdb.DuckDBPyConnection) -> None:
    connection.execute("CREATE OR REPLACE TEMP TABLE large AS SELECT i AS x FROM range(20001) t(i)")
    call = "FROM influential_values('large', 'x', statistic := '{}')"
    said = complaint(connection, call.format("huber_location"))
    assert said.startswith("influential_values: statistic must be mean, median, trimmed_mean, ")
    assert "above 400,000,000, got huber_location(1.345) of 20,001 values, 20,001 of them" in said
    for statistic in FAST:
        assert answer(connection, call.format(statistic))
