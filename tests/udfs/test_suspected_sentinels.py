"""What `value_profile` takes for a code, and how rarely it cries wolf."""

from collections.abc import Callable

import duckdb
import pytest

from tests.udfs.table_calls import answer, profile

DWELL = "[10 + (i * 7) % 23 for i in range(60)]"
Flagged = Callable[[str], list[str]]


@pytest.fixture
def flagged(connection: duckdb.DuckDBPyConnection) -> Flagged:
    def suspects(values: str) -> list[str]:
        return list(profile(connection, values)["suspected_sentinels"])

    return suspects


@pytest.mark.parametrize("code", ["-999", "9999", "-9999", "-1", "-99", "32767", "-2147483648"])
@pytest.mark.parametrize("times", [3, 26, 140])
def test_a_code_is_found_in_few_rows_and_in_most(flagged: Flagged, code: str, times: int) -> None:
    expected = [f"{code} ({times} times)"]
    assert flagged(f"{DWELL} || [{code} for i in range({times})]") == expected


@pytest.mark.parametrize(
    ("values", "expected"),
    [
        # What looks like a code needs two, another value three.
        (f"{DWELL} || [-999]", []),
        (f"{DWELL} || [-999, -999]", ["-999 (2 times)"]),
        (f"{DWELL} || [5000, 5000]", []),
        (f"{DWELL} || [5000, 5000, 5000]", ["5000 (3 times)"]),
        # Two codes on one side, on both sides, next to each other, each in a fifth of the rows.
        (f"{DWELL} || [-999 for i in range(20)] || [-9999 for i in range(20)]",
         ["-9999 (20 times)", "-999 (20 times)"]),
        (f"{DWELL} || [-999 for i in range(20)] || [9999 for i in range(21)]",
         ["9999 (21 times)", "-999 (20 times)"]),
        (f"{DWELL} || [9998 for i in range(5)] || [9999 for i in range(5)]",
         ["9998 (5 times)", "9999 (5 times)"]),
        # Wild values around a code do not hide it.
        (f"{DWELL} || [400, 700, 1800, 3700, 4100, 5200] || [9999 for i in range(4)]",
         ["9999 (4 times)"]),
        # Small groups.
        ("[30, 31, 29, 28, 35, -999, -999]", ["-999 (2 times)"]),
        ("[30, 31, 29, -999, -999]", ["-999 (2 times)"]),
        # −1 as the only negative value, inside the fences.
        ("[0, 1, 2, 3, 4, 5, 6, 7, 8, 9, -1, -1, -1]", ["-1 (3 times)"]),
        ("[0, 1, 2, 3, 4, 5, 6, 7, 8, 9, -1, -1, -1, -2]", []),
        ("[0, 1, -1, -1, -1, 0, 1, 1]", []),
        # Zero among weights, decimals, half of the rows equal.
        ("[70.5 + (i * 7) % 11 for i in range(40)] || [0, 0, 0]", ["0.0 (3 times)"]),
        ("[20.25 + i for i in range(60)]::FLOAT[] || [99.9, 99.9, 99.9]::FLOAT[]", []),
        ("[2.25 + i / 10 for i in range(30)]::FLOAT[] || [99.9, 99.9]::FLOAT[]",
         ["99.9 (2 times)"]),
        ("[2.25 + i / 10 for i in range(30)]::DECIMAL(9, 2)[] || [-99.99, -99.99]",
         ["-99.99 (2 times)"]),
        ("[0 for i in range(80)] || [1 + i % 6 for i in range(20)] || [9999, 9999]",
         ["9999 (2 times)"]),
        # Infinity and NaN have counts of their own.
        (f"{DWELL}::DOUBLE[] || ['inf', 'inf', 'inf', 'nan', 'nan', 'nan']::DOUBLE[]", []),
        # Two values, few categories, one value: nothing to judge by.
        ("[0 for i in range(97)] || [1, 1, 1]", []),
        ("[1 for i in range(90)] || [2 for i in range(8)] || [9, 9]", []),
        ("[5, 5, 5, 5]", []),
        ("[5, 5, 5, 9999, 9999]", []),
        # Long integers are listed to the last digit.
        ("[i for i in range(30)] || [9223372036854775807, 9223372036854775807, "
         "9223372036854775807]", ["9223372036854775807 (3 times)"]),
    ],
)  # fmt: skip
def test_what_is_suspected(flagged: Flagged, values: str, expected: list[str]) -> None:
    assert flagged(values) == expected


def test_suspects_shift_and_scale_with_the_values(flagged: Flagged) -> None:
    for change in ("x + 1e9", "x * 1e200", "-x", "x * 1e-200"):
        found = flagged(
            f"[{change.replace('x', 'x::DOUBLE')} for x in {DWELL} || [5000, 5000, 5000]]"
        )
        assert len(found) == 1
        assert found[0].endswith("(3 times)")


CLEAN = {
    "log-normal to 5 s": "round(exp(3.4 + 0.6 * z) / 5) * 5",
    "log-normal to 1 s": "round(exp(3.4 + 0.6 * z))",
    "wide log-normal to 5 s": "round(exp(3.4 + 1.2 * z) / 5) * 5",
    "heavy tails on both sides": "round(10 * z / sqrt(u))",
    "counts": "floor(-ln(u) / 0.5)",
    "counts, mostly 0": "CASE WHEN z > 0.8 THEN floor(-ln(u) / 0.5) ELSE 0 END",
}


@pytest.mark.parametrize("clean", CLEAN)
@pytest.mark.parametrize("size", [20, 200, 5000])
def test_clean_values_raise_few_false_alarms(
    connection: duckdb.DuckDBPyConnection, clean: str, size: int
) -> None:
    """At most one group in a hundred; the values are drawn by hash, the same in every run."""
    groups = {20: 2000, 200: 1000, 5000: 40}[size]
    uniform = "(hash({} + i) % 1000003 + 0.5) / 1000003"
    connection.execute(
        f"""CREATE OR REPLACE TEMP TABLE clean AS
        SELECT i // {size} AS g, {CLEAN[clean]} AS v FROM (
            SELECT i, {uniform.format("7e8::BIGINT")} AS u,
                sqrt(-2 * ln({uniform.format("1e9::BIGINT")}))
                    * cos(2 * pi() * {uniform.format("2e9::BIGINT")}) AS z
            FROM range({size * groups}) t(i))"""
    )
    ((alarms, n),) = connection.execute(
        "SELECT count_if(len(suspected_sentinels) > 0), count(*) "
        "FROM value_profile('clean', by := 'g')"
    ).fetchall()
    assert n == groups
    assert alarms <= groups / 100


@pytest.mark.parametrize("share", [0.005, 0.3, 0.6])
def test_codes_in_rounded_log_normal_values_are_found_in_every_group(
    connection: duckdb.DuckDBPyConnection, share: float
) -> None:
    connection.execute(
        f"""CREATE OR REPLACE TEMP TABLE coded AS SELECT i // 2000 AS g,
            CASE WHEN hash(i) % 1000 < {1000 * share} THEN 9999
                ELSE round(exp(3.4 + 0.6 * sqrt(2) * (u - 0.5) * 4) / 5) * 5 END AS dwell_s
        FROM (SELECT i, (hash(i + 1) % 1000003) / 1000003 AS u FROM range(60000) t(i))"""
    )
    rows = answer(connection, "FROM value_profile('coded', by := 'g')")
    assert len(rows) == 30
    for row in rows:
        assert len(row["suspected_sentinels"]) == 1
        assert row["suspected_sentinels"][0].startswith("9999.0 (")
