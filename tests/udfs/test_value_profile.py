"""`value_profile` against the same counts written out in Python, type by type."""

import itertools
import math
import random
from collections import Counter
from decimal import Decimal
from typing import Any

import duckdb
import pyarrow as pa
import pytest

from tests.udfs.table_calls import answer, profile

Row = dict[str, Any]


# Against Python, over columns whose NULLs lie in different rows


def drawn_table(seed: int, rows: int) -> pa.Table:
    """Few distinct values, many ties and NULLs; every type its own."""
    draw = random.Random(seed)

    def column(*choices: Any) -> list[Any]:
        return [draw.choice(choices) for _ in range(rows)]

    big = 2**53
    return pa.table(
        {
            "key one": pa.array(column("R1", "R2", None)),
            "key two": pa.array(column(1, 2)),
            "at": pa.array(column(*range(rows), None), pa.int64()),
            "dwell_s": pa.array(column(None, 0.0, -0.0, 1.5, -2.5, math.nan, math.inf, 30.0)),
            "short": pa.array(column(None, 0.1, -7.0, 2.0, math.nan), pa.float32()),
            "boardings": pa.array(column(None, 0, 1, -1, 2), pa.int8()),
            "visit": pa.array(column(None, big, big + 1, -big - 1, -big), pa.int64()),
            "ticket": pa.array(column(None, 2**64 - 1, 2**64 - 2, 0), pa.uint64()),
            "fare": pa.array(column(None, Decimal("1.20"), Decimal("-0.05"), Decimal("0.00"))),
            "long": pa.array(
                column(None, Decimal(10**30 + 1) / 10, Decimal(10**30) / 10, Decimal("-0.1")),
                pa.decimal128(38, 1),
            ),
            "stop": pa.array(column(None, "Mill Lane", "Abbey", "", "Zoo", "ärmel")),
            "ramp_used": pa.array(column(None, True, False)),
            "vehicles": pa.array(column(None, [1, 2], [1], []), pa.list_(pa.int64())),
        }
    )


NUMBERS = {"dwell_s", "short", "boardings", "visit", "ticket", "fare", "long", "key two", "at"}


def comparable(value: Any) -> Any:
    """A value with the equality of SQL: NaN equals NaN, 0.0 equals −0.0."""
    if isinstance(value, float):
        return "nan" if math.isnan(value) else value + 0.0
    return tuple(value) if isinstance(value, list) else value


def expected_profile(values: list[Any], number: bool, texts: dict[Any, str]) -> Row:
    present = [comparable(value) for value in values if value is not None]
    counts = Counter(present)
    most = max(counts.values(), default=0)
    tied = [value for value, count in counts.items() if count == most]

    def place(value: Any) -> Any:
        if number:
            return math.inf if value == "nan" else value
        return texts[value].encode()

    infinite = sum(value in (math.inf, -math.inf) for value in present)
    tied.sort(key=lambda value: (value == "nan", place(value)))
    return {
        "n": len(present),
        "n_null": len(values) - len(present),
        "n_nan": counts["nan"] if number else None,
        "n_infinite": infinite if number else None,
        "n_zero": counts[0] if number else None,
        "n_negative": sum(v != "nan" and v < 0 for v in present) if number else None,
        "n_distinct": len(counts),
        "most_frequent": texts[tied[0]] if tied else None,
        "most_frequent_share": most / len(present) if present else None,
    }


def longest_run(values: list[Any]) -> int:
    runs = [(key, len(list(run))) for key, run in itertools.groupby(map(comparable, values))]
    return max((length for key, length in runs if key is not None), default=0)


def texts_of(connection: duckdb.DuckDBPyConnection, column: str) -> dict[Any, str]:
    """How the engine itself writes each value of the table `drawn`."""
    found = connection.execute(f'SELECT DISTINCT "{column}", "{column}"::VARCHAR FROM drawn')
    texts = {comparable(value): text for value, text in found.fetchall()}
    if 0.0 in texts and column == "dwell_s":
        texts[0.0] = "0.0"
    return texts


@pytest.mark.parametrize("by", [[], ["key one"], ["key one", "key two"]])
@pytest.mark.parametrize(("seed", "rows"), [(1, 400), (2, 40), (3, 7)])
def test_against_python(
    connection: duckdb.DuckDBPyConnection, by: list[str], seed: int, rows: int
) -> None:
    drawn = drawn_table(seed, rows)
    connection.register("drawn_rows", drawn)
    connection.execute("CREATE OR REPLACE TEMP TABLE drawn AS FROM drawn_rows")
    connection.unregister("drawn_rows")
    found = answer(connection, f"FROM value_profile('drawn', by := {by!r}::VARCHAR[])")
    records = drawn.to_pylist()
    groups: dict[tuple[Any, ...], list[Row]] = {}
    for record in records:
        groups.setdefault(tuple(record[key] for key in by), []).append(record)
    columns = [name for name in drawn.column_names if name not in by]
    assert len(found) == len(groups) * len(columns)
    for row in found:
        group = groups[tuple(row[key] for key in by)]
        name = row["column_name"]
        values = [record[name] for record in group]
        expected = expected_profile(values, name in NUMBERS, texts_of(connection, name))
        assert {field: row[field] for field in expected} == expected, name
        whole = [tuple(comparable(value) for value in record.values()) for record in group]
        assert row["n_duplicated_rows"] == len(whole) - len(set(whole))
        assert row["longest_run"] is None


@pytest.mark.parametrize("by", [[], ["key two"]])
def test_longest_runs_against_python(connection: duckdb.DuckDBPyConnection, by: list[str]) -> None:
    drawn = drawn_table(4, 300)
    positions = list(range(297)) + [None] * 3
    random.Random(5).shuffle(positions)
    drawn = drawn.set_column(2, "at", pa.array(positions, pa.int64()))
    connection.register("drawn_rows", drawn)
    connection.execute("CREATE OR REPLACE TEMP TABLE drawn AS FROM drawn_rows")
    connection.unregister("drawn_rows")
    found = answer(
        connection, f"FROM value_profile('drawn', by := {by!r}::VARCHAR[], position := 'at')"
    )
    assert "at" not in {row["column_name"] for row in found}
    assert max(row["longest_run"] for row in found) > 3
    for row in found:
        records = [r for r in drawn.to_pylist() if all(r[key] == row[key] for key in by)]
        records = sorted((r for r in records if r["at"] is not None), key=lambda r: r["at"])
        assert row["longest_run"] == longest_run([r[row["column_name"]] for r in records])


# Runs


def test_a_null_ends_a_run_and_is_none(connection: duckdb.DuckDBPyConnection) -> None:
    table = "(SELECT unnest(range(9)) AS at, unnest([4, 4, NULL, NULL, NULL, 4, 5, 5, 5]) AS v)"
    (row,) = answer(connection, f"FROM value_profile('{table}', position := 'at')")
    assert row["longest_run"] == 3
    (row,) = answer(connection, f"FROM value_profile('{table}', 'v', position := 'at')")
    assert row["longest_run"] == 3


def test_rows_without_a_position_are_left_out(connection: duckdb.DuckDBPyConnection) -> None:
    table = "(SELECT unnest([1, NULL, 2, NULL, NULL]) AS at, unnest([7, 8, 7, 8, 8]) AS v)"
    (row,) = answer(connection, f"FROM value_profile('{table}', position := 'at')")
    assert row["longest_run"] == 2
    (row,) = answer(connection, "FROM value_profile('(SELECT NULL AS at, 1 AS v)', "
                                "position := 'at')")  # fmt: skip
    assert row["longest_run"] == 0


def test_rows_of_equal_position_stand_in_a_fixed_order(
    connection: duckdb.DuckDBPyConnection,
) -> None:
    query = (
        "SELECT longest_run FROM value_profile('(SELECT i // 7 AS at, hash(i) % 2 AS v "
        "FROM range(5000) t(i) ORDER BY hash(i + {}))', position := 'at')"
    )
    runs = {connection.execute(query.format(order)).fetchall()[0] for order in range(4)}
    assert len(runs) == 1


def test_position_may_be_any_type_that_orders(connection: duckdb.DuckDBPyConnection) -> None:
    for kind in ("VARCHAR", "DATE", "DOUBLE"):
        value = {"VARCHAR": "chr(97 + i)", "DATE": "DATE '2030-01-01' + i"}.get(kind, "i / 2")
        connection.execute(
            f"CREATE OR REPLACE TEMP TABLE ordered AS SELECT {value} AS at, i // 4 AS v "
            "FROM (SELECT CAST(i AS INTEGER) AS i FROM range(10) t(i)) ORDER BY hash(i)"
        )
        (row,) = answer(connection, "FROM value_profile('ordered', position := 'at')")
        assert row["longest_run"] == 4


# Exactness and text


@pytest.mark.parametrize(
    ("values", "distinct", "most"),
    [
        ("[9007199254740992, 9007199254740993, 9007199254740993]", 2, "9007199254740993"),
        ("[-9007199254740993, -9007199254740992, -9007199254740992]", 2, "-9007199254740992"),
        ("[18446744073709551615::UBIGINT, 18446744073709551614]", 2, "18446744073709551614"),
        ("[170141183460469231731687303715884105727::HUGEINT, 1, "
         "170141183460469231731687303715884105726]", 3, "1"),
        ("['-170141183460469231731687303715884105728'::HUGEINT, 5, 5]", 2, "5"),
        ("[-18446744073709551617::HUGEINT, -18446744073709551616, -18446744073709551616]", 2,
         "-18446744073709551616"),
        ("[340282366920938463463374607431768211455::UHUGEINT, 0, "
         "340282366920938463463374607431768211455]", 2, "340282366920938463463374607431768211455"),
        ("[0.1::DECIMAL(38, 30), 0.100000000000000000000000000001, "
         "0.100000000000000000000000000001]", 2, "0.100000000000000000000000000001"),
        ("[1234567890123456.78::DECIMAL(18, 2), 1234567890123456.79, 1234567890123456.79]", 2,
         "1234567890123456.79"),
        ("['123456789012345678901234567890'::BIGNUM, 1, 1]", 2, "1"),
        ("[0.1::FLOAT, 0.1, 7]", 2, "0.1"),
        ("[0.1, 0.30000000000000004, 0.30000000000000004]::DOUBLE[]", 2, "0.30000000000000004"),
        ("[1e300, 1e300, -1e-300]", 2, "1e+300"),
        ("[0.0, -0.0]::DOUBLE[]", 1, "0.0"),
        ("['nan'::DOUBLE, 'nan', 1]", 2, "nan"),
        ("['nan'::DOUBLE, 1]", 2, "1.0"),
        ("['b', 'a', 'B']", 3, "B"),
        ("[DATE '2030-03-02', DATE '2030-03-01', NULL]", 2, "2030-03-01"),
        ("[{'a': 1, 'b': NULL}, {'a': 1, 'b': NULL}, {'a': 2, 'b': 0}]", 2,
         "{'a': 1, 'b': NULL}"),
        ("[[1, 2], [1], [1]]", 2, "[1]"),
        ("[MAP {'a': 1}, MAP {'a': 1}]", 1, "{a=1}"),
        ("['x'::BLOB, 'y'::BLOB]", 2, "x"),
        ("['b', 'a', 'b']::ENUM('b', 'a')[]", 2, "b"),
        ("[true, false]", 2, "false"),
        ("[INTERVAL 1 DAY, INTERVAL 1 DAY]", 1, "1 day"),
    ],
)  # fmt: skip
def test_values_are_told_apart_to_the_last_digit(
    connection: duckdb.DuckDBPyConnection, values: str, distinct: int, most: str
) -> None:
    row = profile(connection, values)
    assert (row["n_distinct"], row["most_frequent"]) == (distinct, most)
    # DuckDB's own count
    kind = connection.execute("SELECT count(DISTINCT v), typeof(any_value(v)) FROM one").fetchall()
    assert kind == [(row["n_distinct"], row["column_type"])]


def test_signs_and_zeros_of_long_numbers(connection: duckdb.DuckDBPyConnection) -> None:
    for kind in ("HUGEINT", "DECIMAL(38, 4)", "BIGINT", "DOUBLE", "FLOAT"):
        big = "9007199254740993" if kind == "BIGINT" else "90071992547409930000"
        row = profile(connection, f"[-{big}, -1, 0, 0, 3, {big}]::{kind}[]")
        assert (row["n_negative"], row["n_zero"], row["n_distinct"]) == (2, 2, 5)


def test_the_same_bits_whatever_the_order_and_the_threads(
    connection: duckdb.DuckDBPyConnection,
) -> None:
    made = (
        "SELECT hash(i) % 40 AS route, hash(i + 1) % 900 / 7 AS dwell_s, "
        "'stop ' || hash(i + 2) % 60 AS stop, i AS visit FROM range(60000) t(i)"
    )
    answers = set()
    before = connection.execute("SELECT current_setting('threads')").fetchall()[0][0]
    for order, threads in ((0, 1), (1, 2), (2, 4)):
        connection.execute(f"SET threads = {threads}")
        connection.execute(
            f"CREATE OR REPLACE TEMP TABLE mixed AS {made} ORDER BY hash(i + {10 + order})"
        )
        answers.add(
            str(
                answer(
                    connection, "FROM value_profile('mixed', by := 'route', position := 'visit')"
                )
            )
        )
    connection.execute(f"SET threads = {before}")
    assert len(answers) == 1


# Empty and missing


def test_nothing_at_all(connection: duckdb.DuckDBPyConnection) -> None:
    for values in ("CAST([] AS DOUBLE[])", "CAST([NULL, NULL] AS DOUBLE[])", "[NULL]"):
        row = profile(connection, values)
        counts = [row[name] for name in ("n", "n_nan", "n_infinite", "n_zero", "n_distinct")]
        assert counts == [0] * 5
        assert (row["most_frequent"], row["most_frequent_share"]) == (None, None)
        assert row["suspected_sentinels"] == []
    row = profile(connection, "CAST([NULL] AS VARCHAR[])")
    assert (row["n"], row["n_null"], row["n_distinct"], row["n_zero"]) == (0, 1, 0, None)
    assert (row["most_frequent"], row["suspected_sentinels"]) == (None, None)


def test_columns_are_those_of_the_table_in_their_order(
    connection: duckdb.DuckDBPyConnection,
) -> None:
    table = '(SELECT 1 AS z, 2 AS a, 3 AS "By", 4 AS m)'

    def names(more: str) -> list[str]:
        return [row["column_name"] for row in answer(
            connection, f"FROM value_profile('{table}'{more})")]  # fmt: skip

    assert names("") == ["z", "a", "By", "m"]
    assert names(", by := 'a'") == ["z", "By", "m"]
    assert names(", by := ['a', 'By'], position := 'z'") == ["m"]
    assert names(", by := 'a', position := 'a'") == ["z", "By", "m"]
    assert names(", columns := ['m', 'z']") == ["m", "z"]
    assert names(", columns := 'a', by := 'a', position := 'a'") == ["a"]
    assert names(", columns := 'by'") == ["By"]


def test_duplicated_rows_count_every_column_of_the_table(
    connection: duckdb.DuckDBPyConnection,
) -> None:
    table = (
        "(VALUES (1, 2.0, NULL), (1, 2.0, NULL), (1, 2.0, NULL), (1, 2.0, 3), (2, 2.0, NULL)) "
        "t(g, v, more)"
    )
    rows = answer(connection, f"FROM value_profile('{table}', columns := 'v', by := 'g')")
    assert [row["n_duplicated_rows"] for row in rows] == [2, 0]
    (row,) = answer(connection, f"FROM value_profile('{table}', columns := 'v')")
    assert row["n_duplicated_rows"] == 2
