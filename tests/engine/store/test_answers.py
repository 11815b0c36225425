"""Kept answers come back to the bit; the limit drops what was unused for longest."""

import math
import struct
import time
from datetime import UTC, date, datetime, timedelta
from decimal import Decimal
from pathlib import Path

import duckdb
import pyarrow as pa
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from midspread.engine.errors import UsageError
from midspread.engine.store import answers as answers_module
from midspread.engine.store.answers import Answers, size_of
from midspread.engine.store.housekeeping import check
from midspread.engine.store.serialising import from_bytes, to_bytes
from midspread.engine.store.store import Store

from .conftest import noise, small_table

ODD_NAN = struct.unpack("<d", struct.pack("<Q", 0x7FF8_0000_DEAD_BEEF))[0]

TABLES = {
    "floats": pa.table({"x": [1.5, math.nan, ODD_NAN, math.inf, -math.inf, -0.0, None, 5e-324]}),
    "decimals": pa.table({"d": pa.array([Decimal("1.10"), None], pa.decimal128(38, 2))}),
    "large decimals": pa.table({"d": pa.array([Decimal(10) ** 60], pa.decimal256(70, 0))}),
    "times": pa.table(
        {
            "tz": pa.array([datetime(2031, 2, 3, tzinfo=UTC)], pa.timestamp("us", "Europe/London")),
            "ns": pa.array([1], pa.timestamp("ns")),
            "day": [date(2031, 2, 3)],
            "time": pa.array([5], pa.time64("us")),
            "span": pa.array([(1, 2, 3)], pa.month_day_nano_interval()),
        }
    ),
    "nested": pa.table(
        {"s": [{"a": [1, None], "b": {"c": "é"}}, None], "l": [[], [{"q": 1.0}]]},
    ),
    "map": pa.table({"m": pa.array([[("a", 1)], None], pa.map_(pa.string(), pa.int64()))}),
    "enum": pa.table({"e": pa.array(["tap reader", "cash box", None]).dictionary_encode()}),
    "same names": pa.Table.from_arrays([pa.array([1]), pa.array(["a"])], ["x", "x"]),
    "odd names": pa.table({'a"b': [1], "": [2], "c'; DROP": [3], "日本": [4], "\n": [5]}),
    "no rows": pa.table({"a": pa.array([], pa.int8()), "b": pa.array([], pa.list_(pa.float32()))}),
    "no columns": pa.table({}),
    "all null": pa.table({"n": pa.nulls(3), "t": pa.array([None], pa.string()).take([0, 0, 0])}),
    "chunks": pa.concat_tables([small_table(2), small_table(2).slice(2), small_table(5)]),
    "binary": pa.table({"b": [b"\x00\xff", None], "u": pa.array([b"x", b""], pa.large_binary())}),
    "metadata": small_table().replace_schema_metadata({"k": "v"}),
    "large": pa.table({"x": [float(i) for i in range(100_000)]}),
}


def same(one: pa.Table, other: pa.Table) -> bool:
    """Whether two tables agree in types, chunks and bits."""
    return one.schema.equals(other.schema, check_metadata=True) and to_bytes(one) == to_bytes(other)


@pytest.mark.parametrize("kind", TABLES)
def test_every_type_comes_back_to_the_bit(answers: Answers, kind: str) -> None:
    table = TABLES[kind]
    assert answers.keep("k", "SELECT 'it''s'", table, '{"é": 1}')
    kept = answers.find("k")
    assert kept is not None
    assert same(kept.table, table)
    assert kept.table.num_rows == table.num_rows == kept.row_count
    assert kept.sql == "SELECT 'it''s'"
    assert kept.inputs == '{"é": 1}'
    assert abs(kept.kept - datetime.now(UTC)) < timedelta(minutes=1)
    assert check(answers.store) == []


def test_nan_keeps_its_bits(answers: Answers) -> None:
    answers.keep("k", "SELECT", TABLES["floats"])
    kept = answers.find("k")
    assert kept is not None
    bits = struct.unpack("<Q", struct.pack("<d", kept.table.column(0)[2].as_py()))[0]
    assert bits == 0x7FF8_0000_DEAD_BEEF


QUERIES = [
    "SELECT 170141183460469231731687303715884105727::HUGEINT AS h, 1::UHUGEINT AS u",
    "SELECT 'a'::ENUM('b', 'a') AS e, [1, NULL] AS l, {'x': {'y': 1}} AS s, MAP {'k': 1} AS m",
    "SELECT '0d6a1a8e-0000-4000-8000-000000000000'::UUID AS u, '101'::BIT AS b, '\\x01'::BLOB AS c",
    "SELECT INTERVAL 1 MONTH AS i, TIME '01:02:03' AS t, TIMESTAMP_NS '2031-01-01' AS n, NULL AS z",
    "SELECT TIMESTAMPTZ '2031-01-01' AS tz, DATE '2031-01-01' AS d, 1.10::DECIMAL(5, 2) AS p",
    "SELECT union_value(num := 1) AS u, [1, 2]::INTEGER[2] AS a, true AS b, 1::UTINYINT AS t",
    "SELECT range AS a, range AS A FROM range(5000) ORDER BY range DESC",
    "SELECT 1 AS a WHERE false",
]


@pytest.mark.parametrize("sql", QUERIES)
def test_every_type_of_the_engine_comes_back(answers: Answers, sql: str) -> None:
    table = duckdb.connect().sql(sql).to_arrow_table()
    assert answers.keep("k", sql, table)
    kept = answers.find("k")
    assert kept is not None
    assert same(kept.table, table)


@given(
    st.dictionaries(
        st.text(max_size=5),
        st.lists(st.floats() | st.none(), min_size=4, max_size=4)
        | st.lists(st.text(max_size=9) | st.none(), min_size=4, max_size=4)
        | st.lists(st.lists(st.integers(-(2**63), 2**63 - 1), max_size=3), min_size=4, max_size=4),
        max_size=4,
    )
)
@settings(max_examples=60, deadline=None)
def test_bytes_give_the_table_back(columns: dict[str, list[object]]) -> None:
    table = pa.table(columns)
    assert same(from_bytes(to_bytes(table)), table)


def test_nothing_is_found_under_another_key(answers: Answers) -> None:
    answers.keep("k", "SELECT 1", small_table())
    assert answers.find("K") is None
    assert answers.find("k' OR true --") is None


def test_a_key_kept_again_is_replaced(answers: Answers) -> None:
    answers.keep("k", "SELECT 1", small_table(1))
    answers.keep("k", "SELECT 2", small_table(2))
    kept = answers.find("k")
    assert kept is not None
    assert kept.table == small_table(2)
    assert answers.count() == 1


def test_clearing_says_how_many(answers: Answers) -> None:
    for number in range(5):
        answers.keep(f"k{number}", "SELECT 1", small_table())
    assert answers.size_bytes() > 0
    assert answers.clear() == 5
    assert answers.clear() == answers.size_bytes() == answers.count() == 0
    assert answers.find("k1") is None
    assert answers.keep("k", "SELECT 1", small_table())
    assert check(answers.store) == []


def age(store: Store, key: str, hours: float) -> None:
    with store.writing() as engine:
        engine.execute(
            "UPDATE store.ledger.answers SET last_used = now() - to_hours(1) * $1 WHERE key = $2",
            [hours, key],
        )


def test_the_limit_drops_what_was_unused_for_longest(answers: Answers) -> None:
    limit = 1_000_000
    for number in range(4):
        assert answers.keep(f"k{number}", "SELECT 1", noise(200_000), limit=limit)
        age(answers.store, f"k{number}", 10 - number)
    assert answers.find("k0") is not None  # a use, which makes it the youngest
    assert answers.keep("k4", "SELECT 1", noise(200_000), limit=limit)
    assert answers.keep("k5", "SELECT 1", noise(200_000), limit=limit)
    found = {f"k{number}" for number in range(6) if answers.find(f"k{number}")}
    assert found == {"k0", "k3", "k4", "k5"}
    assert answers.size_bytes() <= limit
    assert check(answers.store) == []


def test_an_answer_larger_than_a_quarter_of_the_limit_is_not_kept(answers: Answers) -> None:
    assert answers.keep("small", "SELECT 1", small_table(), limit=1_000_000)
    assert not answers.keep("k", "SELECT 1", noise(260_000), limit=1_000_000)
    assert answers.find("k") is None
    assert answers.find("small") is not None
    assert not answers.keep("k", "SELECT 1", small_table(), limit=0)


def test_the_limit_comes_from_the_variable_the_store_or_is_a_gibibyte(store: Store) -> None:
    assert Answers(store, environment={}).limit() == 1 << 30
    Answers(store).set_limit(4000)
    assert Answers(store, environment={}).limit() == 4000
    assert not Answers(store, environment={}).keep("k", "SELECT 1", small_table(1000))
    roomy = Answers(store, environment={"MIDSPREAD_ANSWERS_LIMIT": "2 MiB"})
    assert roomy.limit() == 2 << 20
    assert roomy.keep("k", "SELECT 1", small_table(1000))
    Answers(store).set_limit(500)
    assert roomy.find("k") is None
    with pytest.raises(UsageError, match="MIDSPREAD_ANSWERS_LIMIT is 'lots'"):
        Answers(store, environment={"MIDSPREAD_ANSWERS_LIMIT": "lots"}).limit()


@pytest.mark.parametrize(
    ("text", "size"),
    [("0", 0), ("512", 512), ("1k", 1000), ("1.5 GB", 1_500_000_000), ("2MiB", 2 << 20)],
)
def test_sizes(text: str, size: int) -> None:
    assert size_of(text, "here") == size


@pytest.mark.parametrize("text", ["", "-1", "1 XB", "GB", "1e3"])
def test_what_is_no_size(text: str) -> None:
    with pytest.raises(UsageError):
        size_of(text, "here")


def test_large_answers_in_parts(answers: Answers, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(answers_module, "_PART_BYTES", 1000)
    table = noise(12_345)
    assert answers.keep("k", "SELECT 1", table)
    kept = answers.find("k")
    assert kept is not None
    assert kept.table == table
    assert check(answers.store) == []


def test_the_file_stays_near_what_it_holds(answers: Answers) -> None:
    """100 answers of 0.2 MB pass through a store limited to 4 MB."""
    for number in range(100):
        assert answers.keep(f"k{number}", "SELECT 1", noise(200_000), limit=4_000_000)
    assert 3_000_000 < answers.size_bytes() <= 4_000_000
    assert answers.store.path.stat().st_size < 5 * 4_000_000
    assert check(answers.store) == []


def test_a_use_is_noted_once_a_minute_at_most(answers: Answers) -> None:
    answers.keep("k", "SELECT 1", small_table())
    age(answers.store, "k", 5)
    answers.find("k")
    content = answers.store.path.read_bytes()
    answers.find("k")
    assert answers.store.path.read_bytes() == content
    with answers.store.reading() as engine:
        rows = engine.execute("SELECT now() - last_used FROM store.ledger.answers").fetchall()
    assert rows[0][0] < timedelta(minutes=1)


def test_a_found_answer_needs_no_arrow_until_it_is_read(path: Path) -> None:
    import subprocess
    import sys

    Answers(Store.open(path)).keep("k", "SELECT 1", small_table())
    code = """
import sys
from pathlib import Path
from midspread.engine.store.answers import Answers
from midspread.engine.store.store import Store
kept = Answers(Store.open(Path(sys.argv[1]))).find("k")
print(kept.row_count, {"pyarrow", "numpy", "pandas", "numba", "scipy"} & sys.modules.keys())
"""
    result = subprocess.run(
        [sys.executable, "-c", code, str(path)], capture_output=True, text=True, check=True
    )
    assert result.stdout == "3 set()\n"


def test_finding_one_of_five_hundred_is_quick(answers: Answers) -> None:
    table = small_table(200)
    content = to_bytes(table)
    with answers.store.writing() as engine:
        engine.execute(
            "CREATE TABLE store.answers.shelf_1"
            " (answer BIGINT, part INTEGER, inputs VARCHAR, content BLOB)"
        )
        engine.execute(
            "INSERT INTO store.ledger.answers SELECT range, 'k' || range, 'SELECT 1', now(), now(),"
            " 200, $1, 1, NULL FROM range(500)",
            [len(content)],
        )
        engine.execute(
            "INSERT INTO store.answers.shelf_1 SELECT range, 0, '{}', $1 FROM range(500)", [content]
        )
    best = math.inf
    for _ in range(5):
        began = time.perf_counter()
        kept = Answers(Store.open(answers.store.path)).find("k250")
        best = min(best, time.perf_counter() - began)
        assert kept is not None
        assert kept.table == table
    assert best < 0.5  # far above the 0.02 s it takes: only a slip of an order of magnitude fails
