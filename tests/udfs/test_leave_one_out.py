"""`leave_one_out`: equal to leaving out each unit in SQL, and what it does with gaps."""

import math
from typing import Any

import duckdb
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from midspread.udfs import register
from tests.udfs.calling import bits
from tests.udfs.table_calls import answer, complaint
from tests.udfs.test_influential_values import FAST, NUMBERS, SLOW, agree, by_hand

ROWS = st.lists(st.tuples(NUMBERS, st.sampled_from([None, "V1", "V2", "V3", "V4"])), min_size=1)


def left_out(
    connection: duckdb.DuckDBPyConnection,
    rows: list[tuple[float | None, str | None]],
    statistic: str = "mean",
) -> list[dict[str, Any]]:
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE given AS "
        "SELECT unnest($values::DOUBLE[]) AS x, unnest($units::VARCHAR[]) AS vehicle",
        {"values": [value for value, _ in rows], "units": [unit for _, unit in rows]},
    )
    return answer(
        connection, f"FROM leave_one_out('given', 'x', 'vehicle', statistic := '{statistic}')"
    )


@settings(max_examples=60, deadline=None)
@given(ROWS, st.sampled_from([*FAST, *SLOW]))
def test_as_by_hand(
    connection: duckdb.DuckDBPyConnection,
    rows: list[tuple[float, str | None]],
    statistic: str,
) -> None:
    found = left_out(connection, list(rows), statistic)
    assert {row["unit"] for row in found} == {unit for _, unit in rows if unit}
    everything = by_hand([value for value, _ in rows], statistic)
    scale = max([1.0, *(abs(v) for v, _ in rows if math.isfinite(v))])
    for row in found:
        rest = [value for value, unit in rows if unit != row["unit"]]
        assert row["n_left_out"] == len(rows) - len(rest)
        expected = by_hand(rest, statistic)
        assert agree(row["estimate_without"], expected, scale)
        assert agree(row["estimate"], everything, scale)
        if expected is None or everything is None:
            assert row["change"] is None and row["rank"] is None
        elif math.isfinite(expected) and math.isfinite(everything):
            assert agree(row["change"], expected - everything, scale)
            larger = sum(
                abs(other["change"]) > abs(row["change"])
                for other in found
                if other["change"] is not None and not math.isnan(other["change"])
            )
            assert row["rank"] == larger + 1


def test_rows_of_no_unit_always_stay(connection: duckdb.DuckDBPyConnection) -> None:
    rows: list[tuple[float | None, str | None]] = [(1.0, "V1"), (3.0, "V2"), (8.0, None)]
    rows += [(None, "V3"), (None, None)]
    first, second = sorted(left_out(connection, rows), key=lambda row: row["unit"])
    assert (first["unit"], first["estimate"], first["estimate_without"]) == ("V1", 4.0, 5.5)
    assert (second["unit"], second["change"], second["rank"]) == ("V2", 0.5, 2)


def test_a_unit_that_is_all_there_is(connection: duckdb.DuckDBPyConnection) -> None:
    for statistic in ("mean", "median", "sd", "winsorized_mean(0.1)"):
        (row,) = left_out(connection, [(1.0, "V1"), (3.0, "V1")], statistic)
        assert row["n_left_out"] == 2 and row["estimate"] is not None
        for name in ("estimate_without", "change", "change_in_spreads", "rank"):
            assert row[name] is None


def test_nan_makes_all_figures_nan(connection: duckdb.DuckDBPyConnection) -> None:
    for statistic in ("mean", "median", "sd"):
        rows = left_out(
            connection, [(1.0, "V1"), (2.0, "V2"), (5.0, "V2"), (math.nan, "V3")], statistic
        )
        for row in rows:
            assert row["rank"] is None
            for name in ("estimate", "estimate_without", "change", "change_in_spreads"):
                assert math.isnan(row[name])


def test_change_in_spreads(connection: duckdb.DuckDBPyConnection) -> None:
    rows: list[tuple[float | None, str | None]] = [
        (float(i * i % 7), f"V{i % 5}") for i in range(50)
    ]
    found = left_out(connection, rows)
    ((spread,),) = connection.execute(
        "SELECT mad_scale(change) FROM leave_one_out('given', 'x', 'vehicle', statistic := 'mean')"
    ).fetchall()
    for row in found:
        assert row["change_in_spreads"] == row["change"] / spread
    equal = left_out(connection, [(7.0, f"V{i}") for i in range(9)])
    assert all(row["change"] == 0.0 and row["change_in_spreads"] is None for row in equal)


def test_change_keeps_its_digits(connection: duckdb.DuckDBPyConnection) -> None:
    """One row of a million, shifted by 1e9."""
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE large AS SELECT 1e9 + i / 8 AS x, "
        "CASE WHEN i = 1000000 THEN 'V1' WHEN i = 600000 THEN 'V2' END AS vehicle "
        "FROM range(1000001) t(i)"
    )
    first, second = answer(
        connection, "FROM leave_one_out('large', 'x', 'vehicle', statistic := 'mean')"
    )
    assert first["change"] == pytest.approx(-62500.0 / 1000000, rel=1e-14)
    assert second["change"] == pytest.approx(-12500.0 / 1000000, rel=1e-14)


def test_the_same_bits_for_any_order_and_number_of_threads() -> None:
    found = []
    for threads, order in ((1, "i"), (3, "hash(i)")):
        with duckdb.connect(config={"threads": threads}) as connection:
            register(connection)
            connection.execute(
                "CREATE TABLE visits AS SELECT i % 7 AS route, hash(i) % 40 AS vehicle, "
                "(hash(i * 5) % 4001) / 10.0 AS dwell_s "
                f"FROM range(300000) t(i) ORDER BY {order}"
            )
            found.append(
                [
                    [
                        bits(row)
                        for row in answer(
                            connection,
                            "FROM leave_one_out('visits', "
                            f"'dwell_s', 'vehicle', by := 'route', statistic := '{statistic}')",
                        )
                    ]
                    for statistic in ("trimmed_mean(0.2)", "median", "huber_location")
                ]
            )
    assert found[0] == found[1]
    assert len(found[0][0]) == 280


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        ("NULL", "unit must be the name of a column, got None;"),
        ("3", "unit must be the name of a column, got 3;"),
        ("'stop', statistic := 'mode'", "statistic must be one of mean, median, sd, "),
        ("'stop', statistic := 3", "statistic must be a text, got 3;"),
        ("'stop', by := 'unit'", "by names unit, which is also a column of the result;"),
    ],
)
def test_wrong_arguments(
    larkmoor: duckdb.DuckDBPyConnection, arguments: str, sentence: str
) -> None:
    said = complaint(larkmoor, f"FROM leave_one_out('visits', 'dwell_s', {arguments})")
    assert said.startswith(f"leave_one_out: {sentence}")
    assert said.endswith(".")
