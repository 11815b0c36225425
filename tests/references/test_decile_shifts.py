"""Differences of deciles: estimates, bootstrap standard errors, coverage, and the rules."""

import math
from typing import Any

import duckdb
import numpy as np
import pytest
import scipy.stats

from midspread.udfs import register
from tests.udfs.calling import bits
from tests.udfs.table_calls import answer, complaint

TENTHS = [i / 10 for i in range(1, 10)]
LIMITS = ("lower", "upper", "simultaneous_lower", "simultaneous_upper")


def shifts(
    connection: duckdb.DuckDBPyConnection, sides: dict[str, Any], more: str = ""
) -> list[dict[str, Any]]:
    connection.execute("CREATE OR REPLACE TEMP TABLE sides (payment VARCHAR, dwell_s DOUBLE)")
    for name, values in sides.items():
        connection.execute(
            "INSERT INTO sides SELECT $name, unnest($values::DOUBLE[])",
            {"name": name, "values": [float(v) for v in values]},
        )
    return answer(connection, f"FROM decile_shifts('sides', 'dwell_s', 'payment'{more})")


def two_sides(seed: int = 3) -> dict[str, Any]:
    generator = np.random.default_rng(seed)
    return {
        "cash box": np.round(generator.lognormal(3.0, 0.6, 83), 2),
        "tap reader": np.round(generator.lognormal(2.8, 0.4, 61), 2),
    }


def test_estimates_as_scipy(connection: duckdb.DuckDBPyConnection) -> None:
    """scipy.stats.mstats.hdquantiles at the nine deciles."""
    sides = two_sides()
    rows = shifts(connection, sides)
    assert [row["decile"] for row in rows] == TENTHS
    for name, column in (("tap reader", "estimate"), ("cash box", "estimate_versus")):
        theirs = scipy.stats.mstats.hdquantiles(sides[name], TENTHS)
        assert [row[column] for row in rows] == pytest.approx(list(theirs), rel=1e-10)
    for row in rows:
        assert (row["label"], row["versus"]) == ("tap reader", "cash box")
        assert (row["n"], row["n_versus"]) == (61, 83)
        assert row["difference"] == row["estimate"] - row["estimate_versus"]


def test_standard_errors_as_a_bootstrap_of_scipys_estimate(
    connection: duckdb.DuckDBPyConnection,
) -> None:
    """4,000 resamples of hdquantiles drawn by numpy; both sides vary by about a percent."""
    sides = two_sides(9)
    rows = shifts(connection, sides, ", resamples := 8000, seed := 4")
    generator = np.random.default_rng(1)
    errors = []
    for values in sides.values():
        drawn = generator.choice(values, (4000, values.size))
        n = values.size
        steps = np.arange(n + 1) / n
        weights = np.stack(
            [np.diff(scipy.stats.beta.cdf(steps, (n + 1) * p, (n + 1) * (1 - p))) for p in TENTHS]
        )
        errors.append((np.sort(drawn, axis=1) @ weights.T).std(axis=0, ddof=1))
    expected = np.hypot(*errors)
    z = scipy.stats.norm.ppf(0.975)
    found = [(row["upper"] - row["lower"]) / (2 * z) for row in rows]
    assert found == pytest.approx(expected.tolist(), rel=0.06)


def test_simultaneous_limits_are_as_wide_as_wilcox_has_them(
    connection: duckdb.DuckDBPyConnection,
) -> None:
    """Wilcox 1995: critical value 80.1 / min(n)² + 2.73 at 0.95 (from memory), by simulation."""
    generator = np.random.default_rng(11)
    sides = {"a": generator.normal(0, 1, 400), "b": generator.normal(0, 1, 400)}
    rows = shifts(connection, sides, ", resamples := 4000")
    z = scipy.stats.norm.ppf(0.975)
    ratios = [
        z * (r["simultaneous_upper"] - r["simultaneous_lower"]) / (r["upper"] - r["lower"])
        for r in rows
    ]
    assert max(ratios) == pytest.approx(min(ratios), rel=1e-9)
    assert ratios[0] == pytest.approx(2.73, abs=0.2)


def test_coverage(connection: duckdb.DuckDBPyConnection) -> None:
    """Equal laws, 400 groups: each decile about 95 %, all nine at once about 95 % too."""
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE nulls AS SELECT g, label, "
        "-ln((hash(g * 31 + label * 7 + i * 1009) % 1000003 + 1) / 1000004.0) AS x "
        "FROM range(400) a(g), range(2) b(label), range(60) c(i)"
    )
    rows = answer(
        connection, "FROM decile_shifts('nulls', 'x', 'label', by := 'g', resamples := 400)"
    )
    within = np.array([r["lower"] <= 0 <= r["upper"] for r in rows]).reshape(400, 9)
    both = np.array([r["simultaneous_lower"] <= 0 <= r["simultaneous_upper"] for r in rows])
    # Three standard errors of a share of 400 around 0.95, and some room for the approximation.
    assert 0.90 < within.mean() < 0.99
    assert 0.90 < both.reshape(400, 9).all(axis=1).mean() < 0.99
    assert within.all(axis=1).mean() < 0.88


def test_a_shift_and_a_tail_are_told_apart(connection: duckdb.DuckDBPyConnection) -> None:
    base = two_sides()["cash box"]
    rows = shifts(connection, {"a": base, "b": base + 4.0})
    assert [row["difference"] for row in rows] == pytest.approx([4.0] * 9, rel=1e-12)
    longer = np.where(base > np.median(base), 2 * base - np.median(base), base)
    differences = [row["difference"] for row in shifts(connection, {"a": base, "b": longer})]
    assert abs(differences[0]) < 0.05 * differences[8] and differences == sorted(differences)


def test_equal_samples_do_not_move_together(connection: duckdb.DuckDBPyConnection) -> None:
    base = two_sides()["cash box"]
    for row in shifts(connection, {"a": base, "b": base}):
        assert row["difference"] == 0.0
        assert row["lower"] < 0.0 < row["upper"]


def test_swapped_levels_turn_every_sign(connection: duckdb.DuckDBPyConnection) -> None:
    sides = two_sides()
    turned = shifts(connection, sides, ", baseline := 'tap reader', resamples := 99")
    for row, other in zip(shifts(connection, sides, ", resamples := 99"), turned, strict=True):
        assert row["difference"] == -other["difference"]
        for low, high in (LIMITS[:2], LIMITS[2:]):
            assert row[low] == -other[high] and row[high] == -other[low]


def test_seed_content_and_nothing_else(connection: duckdb.DuckDBPyConnection) -> None:
    first = bits(shifts(connection, two_sides(), ", resamples := 50"))
    assert bits(shifts(connection, two_sides(), ", resamples := 50")) == first
    assert bits(shifts(connection, two_sides(), ", resamples := 50, seed := 1")) != first
    found = []
    for threads, order in ((1, "i"), (4, "hash(i)")):
        with duckdb.connect(config={"threads": threads}) as other:
            register(other)
            other.execute(
                "CREATE TABLE visits AS SELECT i % 5 AS route, hash(i) % 2 AS payment, "
                "(hash(i * 5) % 4001) / 8.0 AS dwell_s FROM range(60000) t(i) "
                f"ORDER BY {order}"
            )
            call = "decile_shifts('visits', 'dwell_s', 'payment', 'route', resamples := 120)"
            found.append(bits(answer(other, f"FROM {call}")))
    assert found[0] == found[1] and len(found[0]) == 45


def test_digits_far_away(connection: duckdb.DuckDBPyConnection) -> None:
    sides = {name: np.round(values * 64) / 64 for name, values in two_sides().items()}
    near = shifts(connection, sides, ", resamples := 200")
    far = shifts(connection, {name: v + 1e9 for name, v in sides.items()}, ", resamples := 200")
    # Other content, so other random numbers: widths agree as two bootstraps do.
    for row, other in zip(near, far, strict=True):
        assert other["difference"] == pytest.approx(row["difference"], abs=1e-6)
        assert other["upper"] - other["lower"] == pytest.approx(
            row["upper"] - row["lower"], rel=0.4
        )


def test_missing_wild_and_constant(connection: duckdb.DuckDBPyConnection) -> None:
    base = two_sides()["cash box"].tolist()
    few = ", resamples := 30"
    for row in shifts(connection, {"a": base, "b": [*base, math.nan]}, few):
        assert math.isfinite(row["estimate_versus"])
        assert all(math.isnan(row[name]) for name in ("estimate", "difference", *LIMITS))
    for row in shifts(connection, {"a": [4.0] * 12, "b": [5.0] * 9}, few):
        assert row["difference"] == 1.0 and all(row[name] is None for name in LIMITS)
    for row in shifts(connection, {"a": base, "b": [5.0]}, few):
        assert row["estimate"] == 5.0 and all(row[name] is None for name in LIMITS)
    for row in shifts(connection, {"a": base}, few):
        assert (row["label"], row["versus"], row["n"]) == (None, "a", 0)
        assert row["estimate"] is None and row["difference"] is None
        assert row["estimate_versus"] is not None
    rows = shifts(connection, {"a": base, "b": [*base * 30, math.inf]}, few)
    assert math.isfinite(rows[4]["difference"]) and math.isfinite(rows[4]["lower"])
    assert shifts(connection, {"a": []}, few) == []


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        ("resamples := 1", "resamples must be a whole number from 2 to 1e+06, got 1"),
        ("resamples := 9.5", "resamples must be a whole number from 2 to 1e+06, got 9.5"),
        ("confidence := 1", "confidence must be a number above 0 and below 1, got 1"),
        ("seed := -1", "seed must be a whole number from 0 to"),
        ("seed := 'x'", "seed must be a whole number from 0 to"),
        ("baseline := 7", "baseline must be a value of label, got 7; stop holds for example 0"),
        ("by := 'decile'", "by names decile, which is also a column"),
    ],
)
def test_wrong_arguments(
    connection: duckdb.DuckDBPyConnection, arguments: str, sentence: str
) -> None:
    table = "(SELECT i % 2 AS stop, i AS dwell_s, 1 AS decile FROM range(30) t(i))"
    said = complaint(connection, f"FROM decile_shifts('{table}', 'dwell_s', 'stop', {arguments})")
    assert said.startswith(f"decile_shifts: {sentence}")
    assert said.endswith(".")


def test_more_than_two_levels(connection: duckdb.DuckDBPyConnection) -> None:
    table = "(SELECT i % 3 AS stop, i AS dwell_s FROM range(30) t(i))"
    said = complaint(connection, f"FROM decile_shifts('{table}', 'dwell_s', 'stop')")
    assert said.startswith("decile_shifts: label must have two levels in a group, got 3; choose")
