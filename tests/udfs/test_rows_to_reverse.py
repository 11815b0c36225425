"""`rows_to_reverse`: as brute force, mirrored, and its stated NULLs."""

import itertools
import math
from fractions import Fraction
from pathlib import Path
from typing import Any

import duckdb
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from midspread.demo_db import build, truth
from midspread.udfs import register
from tests.udfs.calling import bits
from tests.udfs.table_calls import answer, complaint

TENTHS = st.lists(st.integers(-20, 40), min_size=1, max_size=6)
SHARES = st.sampled_from([0.0, 0.1, 0.2, 0.25, 0.34, 0.4, 0.5])
FIGURES = ("difference", "rows_to_reverse", "share_of_rows", "difference_after")
ENDS = ("lowest", "highest")


def reversed_rows(
    connection: duckdb.DuckDBPyConnection, sides: dict[str, list[float]], more: str = ""
) -> dict[str, Any]:
    rows = [(name, value) for name, values in sides.items() for value in values]
    connection.execute("CREATE OR REPLACE TEMP TABLE sides (payment VARCHAR, dwell_s DOUBLE)")
    connection.execute(
        "INSERT INTO sides SELECT unnest($names::VARCHAR[]), unnest($values::DOUBLE[])",
        {"names": [name for name, _ in rows], "values": [value for _, value in rows]},
    )
    (row,) = answer(connection, f"FROM rows_to_reverse('sides', 'dwell_s', 'payment'{more})")
    return row


def location(values: Any, share: float) -> Fraction:
    kept = sorted(values)
    g = min(int(share * len(kept)), (len(kept) - 1) // 2)
    kept = kept[g : len(kept) - g]
    return Fraction(sum(kept), len(kept))


def fewest(baseline: list[int], other: list[int], share: float) -> int | None:
    """By going through every set of rows."""
    difference = location(other, share) - location(baseline, share)
    found: dict[int, list[Fraction]] = {}
    for place, side in enumerate((baseline, other)):
        for left in range(1, len(side) + 1):
            figures = [location(kept, share) for kept in itertools.combinations(side, left)]
            found[2 * (len(side) - left) + place] = [min(figures), max(figures)]
    best = None
    for b, o in itertools.product(range(len(baseline)), range(len(other))):
        lowest = found[2 * o + 1][0] - found[2 * b][1]
        highest = found[2 * o + 1][1] - found[2 * b][0]
        turned = lowest < 0 if difference > 0 else highest > 0
        if difference != 0 and turned and (best is None or b + o < best):
            best = b + o
    return best


@settings(max_examples=100, deadline=None)
@given(TENTHS, TENTHS, SHARES)
def test_as_brute_force(
    connection: duckdb.DuckDBPyConnection, baseline: list[int], other: list[int], share: float
) -> None:
    """On tenths, whose equal means are ties although no tenth is a double."""
    sides = {"cash box": [v / 10 for v in baseline], "tap reader": [v / 10 for v in other]}
    row = reversed_rows(connection, sides, f", statistic := 'trimmed_mean({share})'")
    assert row["rows_to_reverse"] == fewest(baseline, other, share)
    difference = location(other, share) - location(baseline, share)
    assert row["difference"] == pytest.approx(float(difference / 10), abs=1e-12)
    assert (row["difference"] == 0.0) == (difference == 0)
    if row["rows_to_reverse"] is None:
        cannot = "cannot be reversed while a row is left on each side"
        assert row["note"] == ("no difference to reverse" if difference == 0 else cannot)
        return
    assert row["note"] is None
    left = {}
    for name, values in (("baseline", sorted(baseline)), ("other", sorted(other))):
        count = row[f"removed_from_{name}"]
        is_higher = (name == "other") == (difference > 0)
        cut = len(values) - count
        gone, left[name] = (
            (values[cut:], values[:cut]) if is_higher else (values[:count], values[count:])
        )
        ends = [row[f"{name}_{end}"] for end in ENDS]
        assert ends == ([gone[0] / 10, gone[-1] / 10] if gone else [None, None])
    after = location(left["other"], share) - location(left["baseline"], share)
    assert after * difference < 0
    assert row["difference_after"] == pytest.approx(float(after / 10), abs=1e-12)
    removed = row["removed_from_other"] + row["removed_from_baseline"]
    assert removed == row["rows_to_reverse"]
    assert row["share_of_rows"] == removed / (len(baseline) + len(other))


@settings(max_examples=100, deadline=None)
@given(
    st.lists(st.floats(-1e6, 1e6), min_size=1, max_size=40),
    st.lists(st.floats(-1e6, 1e6), min_size=1, max_size=40),
    SHARES,
)
def test_swapped_labels_mirror(
    connection: duckdb.DuckDBPyConnection, one: list[float], other: list[float], share: float
) -> None:
    setting = f", statistic := 'trimmed_mean({share})'"
    row = reversed_rows(connection, {"cash box": one, "tap reader": other}, setting)
    for names, more in (
        (("tap reader", "cash box"), ""),
        (("cash box", "tap reader"), ", baseline := 'tap reader'"),
    ):
        sides = dict(zip(names, (one, other), strict=True))
        turned = reversed_rows(connection, sides, setting + more)
        for name in ("rows_to_reverse", "share_of_rows", "note"):
            assert turned[name] == row[name]
        for name in ("difference", "difference_after"):
            assert turned[name] == (None if row[name] is None else 0.0 - row[name])
        for ours, theirs in (("other", "baseline"), ("baseline", "other")):
            for name in ("n_{}", "removed_from_{}", "{}_lowest", "{}_highest"):
                assert turned[name.format(ours)] == row[name.format(theirs)]


def test_the_rule_among_equally_small_sets(connection: duckdb.DuckDBPyConnection) -> None:
    """Removing 9 leaves 1 − 4; removing 0 leaves 5 − 8; the same far: more of the higher level."""
    row = reversed_rows(connection, {"a": [0, 8], "b": [1, 9]})
    assert (row["rows_to_reverse"], row["difference_after"]) == (1, -3.0)
    assert (row["removed_from_other"], row["removed_from_baseline"]) == (1, 0)
    # Removing 9 leaves 1 − 4.5, removing 0 leaves 5 − 9: the latter turns it farther.
    row = reversed_rows(connection, {"a": [0, 9], "b": [1, 9]})
    assert (row["removed_from_other"], row["removed_from_baseline"]) == (0, 1)
    assert row["difference_after"] == -4.0


def test_greedy_would_be_wrong(connection: duckdb.DuckDBPyConnection) -> None:
    """Removing 10 first moves the difference most, and then two more are needed."""
    row = reversed_rows(connection, {"a": [1, 2, 8], "b": [5, 10]})
    assert (row["rows_to_reverse"], row["removed_from_baseline"]) == (2, 2)
    assert (row["baseline_lowest"], row["baseline_highest"]) == (1, 2)


def test_equal_decimal_means_are_a_tie(connection: duckdb.DuckDBPyConnection) -> None:
    for statistic in ("mean", "trimmed_mean(0.1)"):
        row = reversed_rows(
            connection, {"a": [0.1, 0.2, 0.3], "b": [0.2]}, f", statistic := '{statistic}'"
        )
        assert row["difference"] == 0.0 and row["note"] == "no difference to reverse"
    # Turned only by one more row than it takes to reach the tie.
    row = reversed_rows(connection, {"a": [0.2], "b": [0.1, 0.2, 0.3, 0.7]})
    assert (row["rows_to_reverse"], row["other_lowest"]) == (2, 0.3)


def test_far_away_and_very_large(connection: duckdb.DuckDBPyConnection) -> None:
    generator = np.random.default_rng(5)
    a, b = (np.round(generator.normal(m, 4.0, 300) * 64) / 64 for m in (20.0, 20.4))
    near = reversed_rows(connection, {"a": a.tolist(), "b": b.tolist()})
    far = reversed_rows(connection, {"a": (a + 1e9).tolist(), "b": (b + 1e9).tolist()})
    assert 1 < near["rows_to_reverse"] < 60
    for name in ("rows_to_reverse", "removed_from_other", "removed_from_baseline", "note"):
        assert far[name] == near[name]
    assert far["difference"] == pytest.approx(near["difference"], abs=1e-6)
    huge = reversed_rows(connection, {"a": [1e308] * 9, "b": [*[1.5e308] * 9, 5e307]})
    assert huge["difference"] == pytest.approx(4e307)
    assert huge["rows_to_reverse"] == 9
    wild = reversed_rows(connection, {"a": [-1e300, *range(20)], "b": [float(v) for v in range(9)]})
    assert (wild["rows_to_reverse"], wild["baseline_highest"]) == (1, -1e300)


def test_values_that_are_no_numbers_or_infinite(connection: duckdb.DuckDBPyConnection) -> None:
    inf = math.inf
    row = reversed_rows(connection, {"a": [1, 2], "b": [1, math.nan]})
    assert math.isnan(row["difference"]) and row["rows_to_reverse"] is None
    assert row["note"] == "NaN among the values, so there is no difference"
    row = reversed_rows(connection, {"a": [1, inf], "b": [1, inf, 7]})
    assert math.isnan(row["difference"])
    assert row["note"] == "infinite values leave no difference"
    row = reversed_rows(connection, {"a": [3, 4], "b": [1, 2, inf]})
    assert row["difference"] == inf and row["difference_after"] == -2.0
    assert (row["rows_to_reverse"], row["other_lowest"]) == (1, inf)
    row = reversed_rows(connection, {"a": [3, 4], "b": [-inf, 5, 6, 7, inf]}, TRIMMED)
    assert (row["difference"], row["rows_to_reverse"]) == (2.5, 1)
    assert row["difference_after"] == -inf  # of four values none is cut: −Inf is in the mean


TRIMMED = ", statistic := 'trimmed_mean(0.2)'"


def test_groups_without_a_comparison(connection: duckdb.DuckDBPyConnection) -> None:
    alone = "one level alone, so there is nothing to compare"
    row = reversed_rows(connection, {"a": [1, 2]})
    assert (row["baseline"], row["other"], row["n_baseline"], row["n_other"]) == ("a", None, 2, 0)
    assert row["note"] == alone and all(row[name] is None for name in FIGURES)
    table = (
        "(VALUES (1, 'a', 1.0), (1, 'b', 2.0), (2, 'b', 4.0), (3, 'b', 4.0), (3, 'c', 9.0), "
        "(4, NULL, 1.0), (5, 'a', NULL)) t(route, payment, dwell_s)"
    )
    connection.execute(f"CREATE OR REPLACE TEMP TABLE few AS FROM {table}")
    call = "FROM rows_to_reverse('few', 'dwell_s', 'payment', by := 'route', baseline := 'a')"
    rows = answer(connection, call)
    assert [(r["route"], r["baseline"], r["other"]) for r in rows] == [
        *((1, "a", "b"), (2, None, "b"), (3, None, "b"))
    ]
    missing = "the baseline has no values in this group"
    assert [r["note"] for r in rows[1:]] == [missing, missing]
    assert [(r["n_baseline"], r["n_other"]) for r in rows] == [(1, 1), (0, 1), (0, 2)]
    assert all(r[name] is None for r in rows[1:] for name in FIGURES)


def test_a_few_stuck_clocks_carry_the_mean_and_not_the_median(tmp_path: Path) -> None:
    """Larkmoor's tap readers: the median's difference rests on many rows, but not on L9."""
    demo = build(tmp_path / "larkmoor", visits=30_000)
    shares = {}
    with duckdb.connect() as connection:
        register(connection)
        call = f"rows_to_reverse('{demo.dwell}', 'dwell_s', 'payment', by := 'route', statistic := "
        for name in ("mean", "median"):
            rows = answer(connection, f"FROM {call} '{name}')")
            shares[name] = {row["route"]: row["share_of_rows"] for row in rows}
    faster = [route.route for route in truth.ROUTES if route.tap_factor < 0.86]
    assert all(shares["median"][route] > 0.03 for route in faster)
    assert shares["median"]["L9"] < 0.03
    assert min(shares["mean"][route] for route in faster) < 0.005


def test_the_same_bits_for_any_order_and_number_of_threads() -> None:
    found = []
    for threads, order in ((1, "i"), (4, "hash(i)"), (3, "-i")):
        with duckdb.connect(config={"threads": threads}) as connection:
            register(connection)
            connection.execute(
                "CREATE TABLE visits AS SELECT i % 97 AS route, hash(i) % 2 AS payment, "
                "(hash(i * 5) % 4001) / 10.0 AS dwell_s FROM range(300000) t(i) "
                f"ORDER BY {order}"
            )
            call = "rows_to_reverse('visits', 'dwell_s', 'payment', by := 'route')"
            found.append(bits(answer(connection, f"FROM {call}")))
    assert found[0] == found[1] == found[2] and len(found[0]) == 97


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        ("statistic := 'sd'", "statistic must be mean, median or trimmed_mean(share), got 'sd'"),
        ("statistic := 3", "statistic must be mean, median or trimmed_mean(share), got 3"),
        ("statistic := 'trimmed_mean(0.7)'", "trimmed_mean: share must be a number from 0 to 0.5"),
        ("baseline := 7", "baseline must be a value of label, got 7; stop holds for example 0"),
        ("by := 'note'", "by names note, which is also a column"),
    ],
)
def test_wrong_arguments(
    connection: duckdb.DuckDBPyConnection, arguments: str, sentence: str
) -> None:
    table = "(SELECT i % 2 AS stop, i AS dwell_s, 1 AS note FROM range(30) t(i))"
    said = complaint(connection, f"FROM rows_to_reverse('{table}', 'dwell_s', 'stop', {arguments})")
    assert said.startswith(f"rows_to_reverse: {sentence}") and said.endswith(".")


def test_more_than_two_levels(connection: duckdb.DuckDBPyConnection) -> None:
    table = "(SELECT i % 3 AS stop, i AS dwell_s FROM range(30) t(i))"
    said = complaint(connection, f"FROM rows_to_reverse('{table}', 'dwell_s', 'stop')")
    assert said.startswith("rows_to_reverse: label must have two levels in a group, got 3; choose")
