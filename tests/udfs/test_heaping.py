"""`heaping`: steps in exact decimals, digits, ties, notes."""

import functools
import math
from collections import Counter
from fractions import Fraction
from typing import Any

import duckdb
import numpy as np
import pyarrow as pa
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from midspread.udfs import register
from tests.udfs.table_calls import answer

FACTORS = (Fraction(5), Fraction(5, 2), Fraction(2), Fraction(1))


@functools.cache
def equipped() -> duckdb.DuckDBPyConnection:
    """One connection for all examples: equipping one takes longer than asking."""
    connection = duckdb.connect()
    register(connection)
    return connection


def look(connection: duckdb.DuckDBPyConnection, values: list[Any], kind: str = "DOUBLE") -> Any:
    connection.register("given_values", pa.table({"v": pa.array(values, pa.float64())}))
    try:
        table = f"(SELECT v::{kind} AS v FROM given_values)"
        (row,) = answer(connection, f"FROM heaping('{table}', 'v')")
    finally:
        connection.unregister("given_values")
    return row


def step_by_hand(values: list[float]) -> Fraction | None:
    """The rule of the notes in fractions: each double stands for the decimal that it prints as."""
    written = [Fraction(repr(value)) for value in values]
    counts = Counter(sorted(written))
    frequent = max(counts, key=lambda value: counts[value])
    judged = [value for value in written if value not in (0, frequent)]
    if not judged and frequent != 0:
        judged = [frequent] if 0 in counts else []
    if len(values) < 10 or len(counts) == 1 or not judged:
        return None
    for power in range(12, -12, -1):
        for factor in FACTORS:
            step = factor * Fraction(10) ** power
            on = sum((value / step).denominator == 1 for value in judged)
            if 10 * on >= 9 * len(judged) and (frequent / step).denominator == 1:
                return step
    return None


@settings(max_examples=100, deadline=None)
@given(
    st.lists(st.integers(-400, 400), min_size=10, max_size=60),
    st.sampled_from([1, 2, 5, 25, 10, 50, 3]),
    st.integers(-7, 4),
    st.lists(st.integers(-9999, 9999), max_size=6),
)
def test_step_equals_brute_force_in_fractions(
    counts: list[int], factor: int, power: int, strays: list[int]
) -> None:
    values = [float(f"{count * factor}e{power}") for count in counts]
    values += [float(f"{stray}e{power - 1}") for stray in strays]
    values = [value + 0.0 for value in values]
    expected = step_by_hand(values)
    connection = equipped()
    row = look(connection, values)
    assert row["step"] == (None if expected is None else float(expected))
    if expected is not None:
        on = sum((Fraction(repr(v)) / expected).denominator == 1 for v in values)
        assert row["on_step"] == on / len(values)
        assert row["quantile_error"] == row["step"] / 2


@pytest.mark.parametrize(
    ("kind", "expected"),
    [("DOUBLE", 0.1), ("FLOAT", 0.1), ("DECIMAL(9,1)", 0.1), ("DECIMAL(9,0)", 1.0)],
)
def test_tenths_are_found_in_every_type(
    larkmoor: duckdb.DuckDBPyConnection, kind: str, expected: float
) -> None:
    values = [round(0.1 * ((i * 37) % 1009), 1) for i in range(500)]
    row = look(larkmoor, values, kind)
    assert (row["step"], row["unit"], row["on_step"]) == (expected, expected, 1.0)


@pytest.mark.parametrize("shift", [0.0, 1e9, -1e9])
def test_far_from_zero_tenths_are_still_tenths(
    larkmoor: duckdb.DuckDBPyConnection, shift: float
) -> None:
    values = [float(f"{int(shift) + (i * 37) % 1009}.{i % 10}") for i in range(500)]
    assert look(larkmoor, values)["step"] == 0.1


def test_integers_of_any_size(larkmoor: duckdb.DuckDBPyConnection) -> None:
    values = [float(17 * i * i % 99991) for i in range(300)]
    assert look(larkmoor, values, "BIGINT")["step"] == 1.0
    assert look(larkmoor, [1000 * v for v in values], "INTEGER")["step"] == 1000.0
    odd = "(SELECT 16777217 + 2 * i AS v FROM range(50) t(i))"
    assert answer(larkmoor, f"FROM heaping('{odd}', 'v')")[0]["ends_in_0"] == 0.0


def test_digits_are_counted_by_hand(larkmoor: duckdb.DuckDBPyConnection) -> None:
    values = [12.0, -10.0, 15.0, 20.0, 25.0, 30.0, 31.0, 0.0, 35.0, 40.0, 44.0, -45.0]
    row = look(larkmoor, values)
    assert (row["step"], row["unit"], row["n"], row["n_distinct"]) == (1.0, 1.0, 12, 12)
    # of eleven without the zero: 0 in 10 20 30 40, 5 in 15 25 35 45, and 1, 2, 4 once each
    assert row["ends_in_0"] == row["ends_in_5"] == 4 / 11
    assert row["whipple"] == pytest.approx(500 * 8 / 11, rel=1e-15)
    apart = 2 * (4 / 11 - 0.1) + 3 * (0.1 - 1 / 11) + 5 * 0.1
    assert row["digit_dissimilarity"] == pytest.approx(50 * apart, rel=1e-14)
    assert row["tied"] == 0.0 and row["most_frequent_share"] == 1 / 12


def test_halves_of_fives_are_written_in_tenths(larkmoor: duckdb.DuckDBPyConnection) -> None:
    row = look(larkmoor, [2.5 * i for i in (1, 2, 3, 5, 7, 8, 11, 12, 13, 20, 21, 3)])
    assert (row["step"], row["unit"], row["whipple"]) == (2.5, 0.1, 500.0)
    assert row["tied"] == 2 / 12 and row["most_frequent_share"] == 2 / 12


@pytest.mark.parametrize(
    ("values", "note"),
    [
        ([1.0] * 9, "fewer than 10 values: no step is sought; all values are equal: no step"),
        ([40.0] * 20, "all values are equal: no step is sought"),
        ([0.0] * 20, "all values are equal: no step is sought"),
        ([0.0] * 12 + [50.0] * 3, "half of the values or more are equal, so mad_scale is 0"),
        ([5.0 * (i % 4) for i in range(40)], "half a step exceeds a tenth of mad_scale"),
        ([float(i) for i in range(40)], ""),
        ([None, None], "no values"),
        ([1.0, math.nan] * 8, "NaN among the values, so every figure is NaN"),
    ],
)
def test_notes(larkmoor: duckdb.DuckDBPyConnection, values: list[Any], note: str) -> None:
    row = look(larkmoor, values)
    assert row["note"].startswith(note) and bool(row["note"]) == bool(note)
    assert (row["step"] is None) == ("no step" in note or note == "no values")


def test_two_values_and_spikes_do_not_make_a_coarse_grid(
    larkmoor: duckdb.DuckDBPyConnection,
) -> None:
    assert look(larkmoor, [0.0] * 10 + [50.0] * 10)["step"] == 50.0
    assert look(larkmoor, [5.0] * 19 + [9.0])["step"] == 1.0
    assert look(larkmoor, [20.0] * 19 + [math.inf])["step"] is None


def test_nan_infinity_and_what_is_off_any_grid(larkmoor: duckdb.DuckDBPyConnection) -> None:
    row = look(larkmoor, [math.nan] + [float(i) for i in range(20)])
    assert all(math.isnan(row[name]) for name in ("step", "on_step", "whipple", "mad_scale"))
    assert row["n"] == 21 and row["n_distinct"] is None
    row = look(larkmoor, [math.inf] + [float(i) for i in range(1, 20)])
    assert (row["step"], row["on_step"]) == (1.0, 19 / 20)
    row = look(larkmoor, np.random.default_rng(7).normal(size=200).tolist())
    assert row["step"] is None or row["step"] < 1e-12
    row = look(larkmoor, [1e300 * i for i in range(1, 30)] + [5e-324])
    assert row["n_distinct"] == 30


@settings(max_examples=100, deadline=None)
@given(
    st.lists(st.floats(-500, 500), min_size=12, max_size=80),
    st.sampled_from([0.1, 0.25, 1.0, 2.5, 5.0, 50.0]),
    st.floats(0.0, 1.0),
)
def test_rounding_moves_no_quantile_by_more_than_half_a_step(
    values: list[float], step: float, prob: float
) -> None:
    """The bound that quantile_error states, for each of the nine sample quantiles and the MAD."""
    rounded = [
        float(round(Fraction(v) / Fraction(str(step))) * Fraction(str(step))) for v in values
    ]
    assume(len(set(rounded)) > 2)
    connection = equipped()
    error = look(connection, rounded)["quantile_error"]
    assume(error is not None and error >= step / 2)
    figures = ", ".join(f"quantile_hf(v, {prob!r}, {kind})" for kind in range(1, 10))
    sql = f"SELECT {figures}, median(v), mad_scale(v) FROM (SELECT unnest($v) AS v)"
    (before,) = connection.execute(sql, {"v": values}).fetchall()
    (after,) = connection.execute(sql, {"v": rounded}).fetchall()
    for one, other in zip(before[:-1], after[:-1], strict=True):
        assert abs(one - other) <= error * (1 + 1e-12)
    assert abs(before[-1] - after[-1]) * 0.6744897501960817 <= 2 * error * (1 + 1e-12)
