"""`group_differences`: symmetry, gaps, bad input, notes, and the same bits in every order."""

import math
from typing import Any

import duckdb
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from midspread.udfs import register
from tests.udfs.calling import bits
from tests.udfs.table_calls import answer, complaint

NUMBERS = st.one_of(
    st.integers(-5, 5).map(float),
    st.floats(-1e6, 1e6),
    st.sampled_from([math.inf, -math.inf, 1e300, -1e300, 5e-324]),
)
SIDES = st.lists(NUMBERS, min_size=1, max_size=40)
TURNED = ("difference", "effect", "hodges_lehmann_shift", "cliffs_delta")
KEPT = ("p_value", "p_holm", "p_bh", "brunner_munzel_p", "note")
FIGURES = (
    *("trimmed_mean", "trimmed_mean_versus", "difference", "lower", "upper", "effect", "p_value"),
    *("p_holm", "p_bh", "hodges_lehmann_shift", "cliffs_delta", "p_more", "brunner_munzel_p"),
)


def compared(
    connection: duckdb.DuckDBPyConnection, sides: dict[str, list[float]], more: str = ""
) -> list[dict[str, Any]]:
    rows = [(name, value) for name, values in sides.items() for value in values]
    connection.execute("CREATE OR REPLACE TEMP TABLE sides (payment VARCHAR, dwell_s DOUBLE)")
    connection.execute(
        "INSERT INTO sides SELECT unnest($names::VARCHAR[]), unnest($values::DOUBLE[])",
        {"names": [name for name, _ in rows], "values": [value for _, value in rows]},
    )
    return answer(connection, f"FROM group_differences('sides', 'dwell_s', 'payment'{more})")


def minus(number: float | None) -> float | None:
    return None if number is None else 0.0 - number


@settings(max_examples=60, deadline=None)
@given(SIDES, SIDES, st.sampled_from([0.0, 0.1, 0.2, 0.4]))
def test_swapped_levels_turn_every_sign(
    connection: duckdb.DuckDBPyConnection, one: list[float], other: list[float], share: float
) -> None:
    """Named the other way round, or with the other one as baseline."""
    setting = f", share := {share}"
    (row,) = compared(connection, {"cash box": one, "tap reader": other}, setting)
    for names, more in (
        (("tap reader", "cash box"), ""),
        (("cash box", "tap reader"), ", baseline := 'tap reader'"),
        (("cash box", "tap reader"), ", baseline := 'tap reader', against := 'baseline'"),
    ):
        sides = dict(zip(names, (one, other), strict=True))
        (turned,) = compared(connection, sides, setting + more)
        assert (turned["n"], turned["n_versus"]) == (row["n_versus"], row["n"])
        assert bits(turned["trimmed_mean"]) == bits(row["trimmed_mean_versus"])
        for name in TURNED:
            assert bits(minus(turned[name])) == bits(minus(minus(row[name]))), name
        assert bits(minus(turned["lower"])) == bits(minus(minus(row["upper"])))
        assert bits([turned[name] for name in KEPT]) == bits([row[name] for name in KEPT])
        assert turned["p_more"] == pytest.approx(1.0 - row["p_more"], abs=1e-15)


@settings(max_examples=60, deadline=None)
@given(SIDES, SIDES)
def test_ranks_and_shift_are_those_of_all_pairs(
    connection: duckdb.DuckDBPyConnection, one: list[float], other: list[float]
) -> None:
    (row,) = compared(connection, {"cash box": one, "tap reader": other})
    pairs = [(b, a) for b in other for a in one]
    more, less = sum(b > a for b, a in pairs), sum(b < a for b, a in pairs)
    assert row["cliffs_delta"] == (more - less) / len(pairs)
    assert row["p_more"] == (2 * more + len(pairs) - more - less) / (2 * len(pairs))
    differences = sorted(b - a for b, a in pairs if not math.isnan(b - a))
    half = len(differences) // 2
    if not differences:
        assert row["hodges_lehmann_shift"] is None
    elif len(differences) % 2:
        assert row["hodges_lehmann_shift"] == differences[half]
    else:
        low, high = differences[half - 1], differences[half]
        middle = low if low == high else (low + high) / 2
        assert bits(row["hodges_lehmann_shift"]) == bits(middle)


@settings(max_examples=60, deadline=None)
@given(st.lists(SIDES, min_size=2, max_size=6), st.randoms(use_true_random=False))
def test_the_rest_is_everything_else(
    connection: duckdb.DuckDBPyConnection, sides: list[list[float]], shuffler: Any
) -> None:
    named = {f"vehicle {i}": values for i, values in enumerate(sides)}
    for row in compared(connection, named, ", against := 'rest'"):
        rest = [v for name, values in named.items() if name != row["label"] for v in values]
        shuffler.shuffle(rest)
        (alone,) = compared(connection, {"b": named[row["label"]], "a": rest})
        same = [name for name in FIGURES if name not in ("p_holm", "p_bh")]
        assert bits([row[name] for name in same]) == bits([alone[name] for name in same])


@pytest.mark.parametrize("against", ["each", "rest", "baseline"])
def test_the_same_bits_for_any_order_and_number_of_threads(against: str) -> None:
    query = (
        f"FROM group_differences('visits', 'dwell_s', 'vehicle', by := 'route', "
        f"against := '{against}')"
    )
    found = []
    for threads, order in ((1, "i"), (4, "hash(i)"), (3, "-i")):
        with duckdb.connect(config={"threads": threads}) as connection:
            register(connection)
            connection.execute(
                "CREATE TABLE visits AS SELECT i % 7 AS route, hash(i) % 9 AS vehicle, "
                "(hash(i * 5) % 4001) / 8.0 AS dwell_s FROM range(300000) t(i) "
                f"ORDER BY {order}"
            )
            found.append(bits(answer(connection, query)))
    assert found[0] == found[1] == found[2]
    assert len(found[0]) == 7 * {"each": 36, "rest": 9, "baseline": 8}[against]


def test_rows_without_a_value_or_a_label_are_skipped(
    connection: duckdb.DuckDBPyConnection,
) -> None:
    clean = "[(1, 5.0), (1, 7.0), (1, 8.0), (2, 1.0), (2, 3.0), (2, 9.0), (2, 9.5)]"
    gaps = "(1, NULL), (2, NULL), (NULL, 4.0), (3, NULL), (NULL, NULL)"
    found = []
    for rows in (clean[1:-1], f"{gaps}, {clean[1:-1]}, {gaps}"):
        connection.execute(
            f"CREATE OR REPLACE TEMP TABLE gapped AS FROM (VALUES {rows}) t(stop, dwell_s)"
        )
        found.append(answer(connection, "FROM group_differences('gapped', 'dwell_s', 'stop')"))
    assert found[0] == found[1] and len(found[0]) == 1


def test_nan_makes_the_figures_nan_of_its_pairs_alone(
    connection: duckdb.DuckDBPyConnection,
) -> None:
    values = [float(i * i % 17) for i in range(20)]
    sides = {"a": values, "b": [*values, math.nan], "c": [v + 1 for v in values]}
    rows = {(r["label"], r["versus"]): r for r in compared(connection, sides)}
    for pair in (("b", "a"), ("c", "b")):
        assert all(math.isnan(rows[pair][name]) for name in FIGURES)
        assert rows[pair]["note"] == "NaN among the values, so every figure is NaN"
    untouched = rows["c", "a"]
    assert untouched["p_holm"] == untouched["p_bh"] == untouched["p_value"]
    rest = compared(connection, sides, ", against := 'rest'")
    assert all(math.isnan(row["p_value"]) and row["n_versus"] in (40, 41) for row in rest)


def test_trimmed_infinities_do_no_harm(connection: duckdb.DuckDBPyConnection) -> None:
    values = [float(i * i % 37) for i in range(30)]
    wild, infinite = [*values, 1e300, -1e300], [*values, math.inf, -math.inf]
    (with_wild,) = compared(connection, {"a": values, "b": wild})
    (with_infinite,) = compared(connection, {"a": values, "b": infinite})
    assert with_infinite.pop("note") == "infinite values"
    assert with_wild.pop("note") == ""
    assert with_infinite == with_wild
    (row,) = compared(connection, {"a": values, "b": infinite}, ", share := 0")
    assert all(math.isnan(row[name]) for name in ("difference", "lower", "p_value"))
    assert math.isfinite(row["hodges_lehmann_shift"])


def test_shifted_far_away_the_digits_hold(connection: duckdb.DuckDBPyConnection) -> None:
    generator = np.random.default_rng(3)
    one, other = (np.round(generator.normal(5.0, 2.0, n) * 64) / 64 for n in (60, 45))
    (near,) = compared(connection, {"a": one.tolist(), "b": other.tolist()})
    (far,) = compared(connection, {"a": (one + 1e9).tolist(), "b": (other + 1e9).tolist()})
    for name in ("effect", "p_value", "lower", "upper", "brunner_munzel_p"):
        assert far[name] == pytest.approx(near[name], rel=1e-6)  # of a mean held to 1e-7
    for name in ("hodges_lehmann_shift", "cliffs_delta"):
        assert far[name] == near[name]


def test_negative_zero_is_zero(connection: duckdb.DuckDBPyConnection) -> None:
    plain = compared(connection, {"a": [0.0, 0.0, 1.0, 2.0], "b": [0.0, 3.0, 0.0, -1.0]})
    signed = compared(connection, {"a": [-0.0, 0.0, 1.0, 2.0], "b": [-0.0, 3.0, 0.0, -1.0]})
    assert bits(plain) == bits(signed)


NO_SPREAD = "no spread is left on either side, so no interval, effect and p_value"
APART = "the two do not overlap, so brunner_munzel_p is the exact permutation p"
SHORT = "fewer than 10 values on a side"
TOO_FEW = "fewer than 2 values kept on a side, so no interval and no p_value"


@pytest.mark.parametrize(
    ("one", "other", "note"),
    [
        (range(10), range(5, 15), ""),
        (range(10), range(9), SHORT),
        (range(10), [3], f"{SHORT}; {TOO_FEW}"),
        ([3], [3], f"{SHORT}; {TOO_FEW}"),
        (range(10), range(50, 60), APART),
        ([4] * 10, [4] * 12, f"{NO_SPREAD}; all values are equal, so no brunner_munzel_p"),
        ([4] * 10, [5] * 12, f"{NO_SPREAD}; {APART}"),
        ([4] * 10 + [9], [4] * 12, NO_SPREAD),
        ([4] * 10, range(12), ""),
    ],
)
def test_notes_and_nulls(
    connection: duckdb.DuckDBPyConnection, one: Any, other: Any, note: str
) -> None:
    (row,) = compared(connection, {"a": list(one), "b": list(other)})
    assert row["note"] == note
    missing = {name for name in FIGURES if row[name] is None}
    expected: set[str] = set()
    if NO_SPREAD in note or TOO_FEW in note:
        expected |= {"lower", "upper", "p_value", "p_holm", "p_bh"}
    if NO_SPREAD in note or len(one) + len(other) < 3:
        expected |= {"effect"}
    if "no brunner_munzel_p" in note or TOO_FEW in note:
        expected |= {"brunner_munzel_p"}
    assert missing == expected


def test_one_level_alone(connection: duckdb.DuckDBPyConnection) -> None:
    for more in ("", ", against := 'rest'", ", against := 'baseline'"):
        (row,) = compared(connection, {"a": [1.0, 2.0, 3.0]}, more)
        assert (row["label"], row["versus"], row["n"], row["n_versus"]) == ("a", None, 3, 0)
        assert row["note"] == "one level alone, so there is nothing to compare"
        assert all(row[name] is None for name in FIGURES)
    assert compared(connection, {"a": []}) == []


def test_a_group_without_the_baseline(connection: duckdb.DuckDBPyConnection) -> None:
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE routes AS SELECT i % 2 AS route, i % 5 AS stop, i AS dwell_s "
        "FROM range(100) t(i) WHERE NOT (i % 2 = 1 AND i % 5 = 0)"
    )
    for baseline in ("", ", baseline := 0", ", baseline := '0'"):
        rows = answer(
            connection,
            "FROM group_differences('routes', 'dwell_s', 'stop', 'route', "
            f"against := 'baseline'{baseline})",
        )
        assert [(r["route"], r["label"], r["versus"]) for r in rows] == [
            *((0, stop, 0) for stop in (1, 2, 3, 4)),
            *((1, stop, None) for stop in (1, 2, 3, 4)),
        ]
        assert {r["note"] for r in rows[4:]} == {"the baseline has no values in this group"}


@pytest.mark.parametrize(
    ("kind", "baseline"),
    [
        ("DATE '2030-01-01' + CAST(i % 3 AS INTEGER)", "DATE '2030-01-02'"),
        ("i % 3 + 0.5", "1.5"),
        ("(i % 3 + 0.5)::DOUBLE", "1.5"),
        ("i % 2 = 1", "true"),
        ("('route ' || i % 3)", "'route 1'"),
        ("TIMESTAMP '2030-01-01 06:00:00' + INTERVAL (i % 3) HOUR", "'2030-01-01 07:00:00'"),
        ("(CASE i % 3 WHEN 0 THEN 'wet' WHEN 1 THEN 'dry' ELSE 'snow' END)", "'dry'"),
    ],
)
def test_labels_of_any_simple_type(
    connection: duckdb.DuckDBPyConnection, kind: str, baseline: str
) -> None:
    table = f"(SELECT {kind} AS label_of_any_type, i * i % 31 AS dwell_s FROM range(60) t(i))"
    rows = answer(
        connection,
        f"FROM group_differences('{table.replace(chr(39), chr(39) * 2)}', 'dwell_s', "
        f"'label_of_any_type', against := 'baseline', baseline := {baseline})",
    )
    expected = connection.execute(
        f"SELECT DISTINCT label_of_any_type AS l FROM {table} ORDER BY l"
    ).fetchall()
    versus = connection.execute(
        f"SELECT DISTINCT label_of_any_type FROM {table} WHERE label_of_any_type = {baseline}"
    ).fetchall()
    assert [(row["label"],) for row in rows] == [level for level in expected if level != versus[0]]
    assert {(row["versus"],) for row in rows} == set(versus)


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        ("share := 0.5", "share must be a number from 0 and below 0.5, got 0.5"),
        ("share := -0.1", "share must be a number from 0 and below 0.5, got -0.1"),
        ("share := NULL", "share must be a number from 0 and below 0.5, got NULL"),
        ("share := 'a fifth'", "share must be a number from 0 and below 0.5, got 'a fifth'"),
        ("confidence := 1", "confidence must be a number above 0 and below 1, got 1"),
        ("confidence := 0", "confidence must be a number above 0 and below 1, got 0"),
        ("confidence := true", "confidence must be a number above 0 and below 1, got True"),
        ("against := 'all'", "against must be 'each', 'rest' or 'baseline', got 'all'"),
        ("against := NULL", "against must be 'each', 'rest' or 'baseline', got NULL"),
        ("against := 'rest', baseline := 1", "baseline cannot go with against := 'rest'"),
        ("baseline := [1]", "baseline must be a value of label, got [1]"),
        ("baseline := 9", "baseline must be a value of label, got 9; stop holds for example 0"),
        ("baseline := 'x'", "baseline must be a value of label, got 'x'; stop holds for"),
        ("by := 'n_versus'", "by names n_versus, which is also a column"),
    ],
)
def test_wrong_arguments(
    connection: duckdb.DuckDBPyConnection, arguments: str, sentence: str
) -> None:
    table = "(SELECT i % 3 AS stop, i AS dwell_s, 1 AS n_versus FROM range(30) t(i))"
    said = complaint(
        connection, f"FROM group_differences('{table}', 'dwell_s', 'stop', {arguments})"
    )
    assert said.startswith(f"group_differences: {sentence}")
    assert said.endswith(".")


def test_too_many_levels_to_compare_pair_by_pair(connection: duckdb.DuckDBPyConnection) -> None:
    table = "(SELECT i % {0} AS vehicle, i AS dwell_s FROM range(1000) t(i))"
    call = "FROM group_differences('{}', 'dwell_s', 'vehicle'{})"
    said = complaint(connection, call.format(table.format(201), ""))
    assert said.startswith("group_differences: label must have at most 200 levels in a group")
    assert "got 201; write for example against := 'rest'" in said
    assert len(answer(connection, call.format(table.format(200), ""))) == 19900
    for against, count in (("rest", 300), ("baseline", 299)):
        rows = answer(connection, call.format(table.format(300), f", against := '{against}'"))
        assert len(rows) == count
