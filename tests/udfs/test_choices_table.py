"""`choices_table`: its grid, its error under no effect, symmetry, the same bits, stated NULLs."""

import math
import threading
from typing import Any

import duckdb
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from midspread.demo_db import build, truth
from midspread.udfs import Control, register
from tests.udfs.calling import bits
from tests.udfs.table_calls import answer, complaint

OF_GROUP = (
    *("choices", "choices_left_out", "share_same_sign", "expected_same_sign"),
    *("share_excluding_zero", "expected_excluding_zero", "p_excluding_zero"),
)
FIGURES = ("estimate", "effect", "lower", "upper")
RE_EXPRESSIONS = ("raw", "log", "sqrt")
RULES = ("none", "fences", "median_mad")
ESTIMATORS = ("mean", "median", "trimmed_mean(0.1)", "trimmed_mean(0.2)")
FEW = ", shuffles := 20"


def table(
    connection: duckdb.DuckDBPyConnection, sides: dict[str, Any], more: str = ""
) -> list[dict[str, Any]]:
    connection.execute("CREATE OR REPLACE TEMP TABLE sides (payment VARCHAR, dwell_s DOUBLE)")
    for name, values in sides.items():
        connection.execute(
            "INSERT INTO sides SELECT $name, unnest($values::DOUBLE[])",
            {"name": name, "values": [float(v) for v in values]},
        )
    return answer(connection, f"FROM choices_table('sides', 'dwell_s', 'payment'{more})")


def two_sides(seed: int = 3) -> dict[str, list[float]]:
    generator = np.random.default_rng(seed)
    return {
        "cash box": np.round(generator.lognormal(3.0, 0.5, 57), 1).tolist(),
        "tap reader": np.round(generator.lognormal(2.9, 0.5, 44), 1).tolist(),
    }


def test_every_choice_has_a_row_in_the_order_of_the_call(
    connection: duckdb.DuckDBPyConnection,
) -> None:
    rows = table(connection, two_sides(), FEW)
    listed = [(r["re_expression"], r["rule"], r["estimator"]) for r in rows]
    assert listed == [(s, r, e) for s in RE_EXPRESSIONS for r in RULES for e in ESTIMATORS]
    for row in rows:
        assert (row["baseline"], row["other"], row["note"]) == ("cash box", "tap reader", None)
        assert [row[name] for name in OF_GROUP] == [rows[0][name] for name in OF_GROUP]
        assert row["sign"] == np.sign(row["estimate"])
        assert row["excludes_zero"] == (row["lower"] > 0 or row["upper"] < 0)
        if row["rule"] == "none":
            assert (row["n_baseline"], row["n_other"]) == (57, 44)
    signs = [row["sign"] for row in rows]
    assert rows[0]["share_same_sign"] == max(signs.count(1), signs.count(-1)) / 36
    assert rows[0]["share_excluding_zero"] == sum(r["excludes_zero"] for r in rows) / 36
    some = table(
        connection,
        two_sides(),
        ", estimators := ['trimmed_mean(0.25)', 'MEAN'], re_expressions := 'sqrt', "
        "rules := ['median_mad']" + FEW,
    )
    assert [r["estimator"] for r in some] == ["trimmed_mean(0.25)", "mean"]
    (same,) = (r for r in rows if listed[rows.index(r)] == ("sqrt", "median_mad", "mean"))
    assert [some[1][name] for name in FIGURES] == [same[name] for name in FIGURES]


def test_rules_are_those_of_row_flags(connection: duckdb.DuckDBPyConnection) -> None:
    """On the values of both levels together."""
    rules = ("fences", "adjusted_fences", "median_mad")
    sides = {name: [*values, 400.0, 0.1] for name, values in two_sides().items()}
    rows = table(connection, sides, f", rules := {list(rules)}, estimators := 'mean'" + FEW)
    for row in rows[:3]:
        flags = f"row_flags('sides', 'dwell_s', rule := '{row['rule']}')"
        kept = dict(
            connection.execute(
                f"SELECT payment, count(*) FROM {flags} WHERE NOT outside GROUP BY payment"
            ).fetchall()
        )
        assert (row["n_baseline"], row["n_other"]) == (kept["cash box"], kept["tap reader"])


def test_choices_that_would_lose_rows_are_left_out(connection: duckdb.DuckDBPyConnection) -> None:
    sides = two_sides()
    for spoilt, left in ((0.0, ["raw", "sqrt"]), (-1.0, ["raw"])):
        rows = table(connection, {**sides, "cash box": [*sides["cash box"], spoilt]}, FEW)
        assert sorted({r["re_expression"] for r in rows}) == left
        assert len(rows) == 12 * len(left) == rows[0]["choices"]
        assert rows[0]["choices_left_out"] == 36 - len(rows)
    logs = ", re_expressions := ['log']" + FEW
    (row,) = table(connection, {"a": [0, 1, 2], "b": [1, 2, 3]}, logs)
    assert (row["choices"], row["choices_left_out"]) == (0, 12)
    assert row["note"] == "every choice would lose rows"
    assert (row["n_baseline"], row["n_other"]) == (3, 3)
    assert row["estimator"] is None and row["p_excluding_zero"] is None


NUMBERS = st.one_of(
    st.integers(0, 12).map(float), st.floats(1e-3, 1e6), st.sampled_from([math.inf, 1e300])
)
SIDES = st.lists(NUMBERS, min_size=1, max_size=25)


@settings(max_examples=50, deadline=None)
@given(SIDES, SIDES)
def test_swapped_levels_turn_every_sign(
    connection: duckdb.DuckDBPyConnection, one: list[float], other: list[float]
) -> None:
    few = ", shuffles := 9"
    rows = table(connection, {"cash box": one, "tap reader": other}, few)
    for names, more in (
        (("tap reader", "cash box"), ""),
        (("cash box", "tap reader"), ", baseline := 'tap reader'"),
    ):
        turned = table(connection, dict(zip(names, (one, other), strict=True)), more + few)
        for row, mirrored in zip(rows, turned, strict=True):
            for name in ("estimate", "effect", "sign"):
                ours = None if row[name] is None else 0.0 - row[name]
                assert bits(ours) == bits(None if ours is None else mirrored[name] + 0.0), name
            for low, high in (("lower", "upper"), ("upper", "lower")):
                ours = None if row[low] is None else 0.0 - row[low]
                assert bits(ours) == bits(None if ours is None else mirrored[high] + 0.0)
            kept = ("excludes_zero", *OF_GROUP)
            assert bits([mirrored[name] for name in kept]) == bits([row[name] for name in kept])


def test_under_no_effect_choices_agree_and_p_is_honest(
    connection: duckdb.DuckDBPyConnection,
) -> None:
    """300 groups, labels without meaning: most choices agree in sign, p rejects as it may."""
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE nulls AS SELECT g, label, "
        "exp(sqrt(-2 * ln((hash(g * 31 + label * 7 + i * 1009) % 1000003 + 1) / 1000004.0)) "
        "* cos(2 * pi() * (hash(g * 37 + label * 11 + i * 1013) % 1000003) / 1000003.0)) AS x "
        "FROM range(300) a(g), range(2) b(label), range(22) c(i)"
    )
    rows = answer(
        connection,
        "SELECT DISTINCT ON (g) * FROM choices_table('nulls', 'x', 'label', by := 'g', "
        "shuffles := 99) ORDER BY g",
    )
    assert len(rows) == 300
    agreeing = np.mean([r["share_same_sign"] for r in rows])
    assert 0.80 < agreeing < 0.97
    assert np.mean([r["expected_same_sign"] for r in rows]) == pytest.approx(agreeing, abs=0.03)
    excluding = np.mean([r["share_excluding_zero"] for r in rows])
    expected = np.mean([r["expected_excluding_zero"] for r in rows])
    assert expected == pytest.approx(excluding, abs=0.03)
    p = np.array([r["p_excluding_zero"] for r in rows])
    # Three standard errors of a share of 300 above; below, as ties of the share make p cautious.
    assert (p <= 0.05).mean() <= 0.05 + 3 * math.sqrt(0.05 * 0.95 / 300)
    assert (p <= 0.2).mean() <= 0.2 + 3 * math.sqrt(0.2 * 0.8 / 300)
    assert (p <= 0.05).mean() > 0.005
    # Some choice or other excludes 0 far more often than 5 %.
    assert np.mean([r["share_excluding_zero"] > 0 for r in rows]) > 0.08


def test_a_real_effect_shows(connection: duckdb.DuckDBPyConnection) -> None:
    base = two_sides()["cash box"]
    rows = table(connection, {"a": base, "b": [v * 2.2 for v in base]}, ", shuffles := 99")
    assert rows[0]["share_same_sign"] == 1.0 and rows[0]["share_excluding_zero"] == 1.0
    assert rows[0]["p_excluding_zero"] <= 0.04
    assert rows[0]["expected_same_sign"] < 0.98 and rows[0]["expected_excluding_zero"] < 0.15
    effects = [row["effect"] for row in rows]
    assert min(effects) > 0.8 and max(effects) < 4.0


def test_the_tap_readers_effect_holds_except_on_mill_lane(tmp_path: Any) -> None:
    demo = build(tmp_path / "larkmoor", visits=30_000)
    with duckdb.connect() as connection:
        register(connection)
        rows = answer(
            connection,
            f"FROM choices_table('{demo.dwell}', 'dwell_s', 'payment', by := 'route', "
            "shuffles := 99)",
        )
    for route in truth.ROUTES:
        own = [row for row in rows if row["route"] == route.route]
        shares = own[0]
        if route.tap_factor == 1.0:
            assert route.route == "L9"
            assert shares["share_excluding_zero"] < 0.3, route
            guarded = [r for r in own if r["rule"] == "median_mad"]
            assert not any(r["excludes_zero"] for r in guarded)
        elif route.tap_factor < 0.86:
            assert shares["share_excluding_zero"] > 0.8 and shares["p_excluding_zero"] < 0.05
            assert all(r["sign"] == -1 for r in own if r["rule"] != "none"), route


def test_the_same_bits_for_any_order_and_number_of_threads() -> None:
    found = []
    for threads, order in ((1, "i"), (4, "hash(i)"), (3, "-i")):
        with duckdb.connect(config={"threads": threads}) as connection:
            register(connection)
            connection.execute(
                "CREATE TABLE visits AS SELECT i % 7 AS route, hash(i) % 2 AS payment, "
                "(hash(i * 5) % 4001) / 8.0 + 1 AS dwell_s FROM range(60000) t(i) "
                f"ORDER BY {order}"
            )
            call = "choices_table('visits', 'dwell_s', 'payment', by := 'route', shuffles := 30)"
            found.append(bits(answer(connection, f"FROM {call}")))
    assert found[0] == found[1] == found[2] and len(found[0]) == 7 * 36


def test_the_seed_chooses_the_shuffles(connection: duckdb.DuckDBPyConnection) -> None:
    first, other = (table(connection, two_sides(), f"{FEW}, seed := {seed}")[0] for seed in (0, 1))
    assert first["expected_same_sign"] != other["expected_same_sign"]
    assert first["share_same_sign"] == other["share_same_sign"]


def test_a_stop_is_heeded_within_one_group() -> None:
    control = Control()
    with duckdb.connect() as connection:
        register(connection, control=control)
        connection.execute(
            "CREATE TABLE visits AS SELECT hash(i) % 2 AS payment, 1 + i % 997 AS dwell_s "
            "FROM range(200000) t(i)"
        )
        query = "FROM choices_table('visits', 'dwell_s', 'payment', shuffles := {})"
        connection.execute(query.format(2)).fetchall()
        before = control.done
        over = threading.Event()

        def stop_once_shuffling() -> None:
            while control.done < before + 1_000_000 and not over.wait(0.001):
                pass
            control.stop()

        watcher = threading.Thread(target=stop_once_shuffling)
        watcher.start()
        try:
            with pytest.raises(duckdb.Error, match="Stopped"):
                connection.execute(query.format(100_000)).fetchall()
        finally:
            over.set()
            watcher.join()
        assert control.done < before + 100_000 * 200_000 / 10
        control.reset()
        assert len(connection.execute(query.format(2)).fetchall()) == 36


def test_digits_far_away_and_at_the_limits(connection: duckdb.DuckDBPyConnection) -> None:
    sides = {name: np.round(np.array(v) * 64) / 64 for name, v in two_sides().items()}
    raw = ", re_expressions := 'raw'" + FEW
    near = table(connection, sides, raw)
    far = table(connection, {name: v + 1e9 for name, v in sides.items()}, raw)
    for row, other in zip(near, far, strict=True):
        for name in FIGURES:
            assert other[name] == pytest.approx(row[name], rel=1e-10)
    logs = ", re_expressions := ['log', 'sqrt']" + FEW
    for row in table(connection, {n: 1e9 + v / 64 for n, v in sides.items()}, logs):
        nearest = next(
            r for r in near if (r["rule"], r["estimator"]) == (row["rule"], row["estimator"])
        )
        per_unit = 1e9 if row["re_expression"] == "log" else 2 * math.sqrt(1e9)
        if row["n_baseline"] == nearest["n_baseline"] and row["n_other"] == nearest["n_other"]:
            assert row["estimate"] * per_unit * 64 == pytest.approx(nearest["estimate"], rel=1e-5)
    for row in table(connection, {"a": [1e308, 1.1e308, 9e307], "b": [1.2e308, 1e308, 5.0]}, FEW):
        assert math.isfinite(row["estimate"])


def test_infinities_that_are_cut_do_no_harm(connection: duckdb.DuckDBPyConnection) -> None:
    sides = two_sides()
    for rows in zip(
        table(connection, {**sides, "cash box": [*sides["cash box"], 1e300]}, FEW),
        table(connection, {**sides, "cash box": [*sides["cash box"], math.inf]}, FEW),
        strict=True,
    ):
        huge, infinite = rows
        if huge["estimator"] == "mean" and huge["rule"] == "none":
            assert infinite["estimate"] == -math.inf
        else:
            assert [infinite[name] for name in FIGURES] == [huge[name] for name in FIGURES]


def test_what_cannot_be_compared(connection: duckdb.DuckDBPyConnection) -> None:
    rows = table(connection, {"a": [1, 2, math.nan], "b": [1, 2, 3]}, FEW)
    assert rows[0]["note"] == "NaN among the values, so every figure is NaN"
    shares = OF_GROUP[2:]
    assert all(math.isnan(row[name]) for row in rows for name in (*FIGURES, *shares))
    assert all(row["sign"] is None and row["excludes_zero"] is None for row in rows)
    rows = table(connection, {"a": [4.0] * 12, "b": [5.0] * 9}, FEW)
    assert all(row["estimate"] > 0 and row["lower"] is None for row in rows)
    assert all(row["effect"] is None and row["excludes_zero"] is None for row in rows)
    assert rows[0]["share_same_sign"] == 1.0 and rows[0]["share_excluding_zero"] == 0.0
    rows = table(connection, {"a": [0.1, 0.2, 0.3], "b": [0.2]}, FEW)
    assert [r["sign"] for r in rows if r["re_expression"] == "raw"] == [0] * 12
    (row,) = table(connection, {"a": [1, 2]}, FEW)
    assert (row["baseline"], row["other"], row["n_baseline"], row["n_other"]) == ("a", None, 2, 0)
    assert row["note"] == "one level alone, so there is nothing to compare"
    assert row["estimator"] is None and row["estimate"] is None and row["choices"] is None
    source = "(VALUES (1, 'a', 1.0), (1, 'b', 2.0), (2, 'b', 4.0), (2, 'c', 5.0)) t(g, l, x)"
    connection.execute(f"CREATE OR REPLACE TEMP TABLE few AS FROM {source}")
    rows = answer(connection, "FROM choices_table('few', 'x', 'l', by := 'g', baseline := 'a')")
    assert [row["g"] for row in rows] == [1] * 36 + [2]
    assert rows[36]["note"] == "the baseline has no values in this group"
    assert (rows[36]["baseline"], rows[36]["n_other"]) == (None, 2)


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        (
            "estimators := ['sd']",
            "estimators must be mean, median or trimmed_mean(share), got 'sd'",
        ),
        ("estimators := []", "estimators must name at least one, got []"),
        ("estimators := ['mean', 'trimmed_mean(0)']", "estimators names mean twice"),
        ("rules := ['tails']", "rules must be among none, fences, adjusted_fences, median_mad"),
        ("re_expressions := ['raw', 'cube']", "re_expressions must be among raw, log, sqrt, got"),
        ("rules := NULL", "rules must name at least one, got None"),
        ("rules := ['fences', 'Fences']", "rules names fences twice"),
        ("confidence := 1", "confidence must be a number above 0 and below 1, got 1"),
        ("shuffles := 0", "shuffles must be a whole number from 1 to 1e+06, got 0"),
        ("seed := -1", "seed must be a whole number from 0 to"),
        ("baseline := 7", "baseline must be a value of label, got 7; stop holds for example 0"),
        ("by := 'rule'", "by names rule, which is also a column"),
    ],
)
def test_wrong_arguments(
    connection: duckdb.DuckDBPyConnection, arguments: str, sentence: str
) -> None:
    source = "(SELECT i % 2 AS stop, i AS dwell_s, 1 AS rule FROM range(30) t(i))"
    said = complaint(connection, f"FROM choices_table('{source}', 'dwell_s', 'stop', {arguments})")
    assert said.startswith(f"choices_table: {sentence}") and said.endswith(".")


def test_more_than_two_levels(connection: duckdb.DuckDBPyConnection) -> None:
    source = "(SELECT i % 3 AS stop, i AS dwell_s FROM range(30) t(i))"
    said = complaint(connection, f"FROM choices_table('{source}', 'dwell_s', 'stop')")
    assert said.startswith("choices_table: label must have two levels in a group, got 3; choose")
