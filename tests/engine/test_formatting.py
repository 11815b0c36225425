"""Results as text: every value in full, read back by other readers than ours."""

import csv
import io
import json
import math
import struct
import subprocess
import sys
from datetime import date, datetime, time
from decimal import Decimal
from pathlib import Path

import duckdb
import pandas as pd
import pyarrow as pa
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from midspread.engine.column_texts import (
    _few_time_texts,
    _many_time_texts,
    plain_texts,
    unique_names,
)
from midspread.engine.errors import UsageError
from midspread.engine.formatting import FORMATS, write_text
from midspread.engine.store.serialising import to_bytes


def text_of(table: pa.Table, form: str) -> str:
    stream = io.StringIO()
    write_text(table, form, stream)
    return stream.getvalue()


def value_texts(table: pa.Table) -> list[str]:
    """First column of the CSV, by Python's reader."""
    return [row[0] for row in csv.reader(io.StringIO(text_of(table, "csv")))][1:]


def bits(value: float) -> bytes:
    return struct.pack("<d", value)


@given(st.lists(st.floats(allow_nan=False), min_size=1, max_size=20))
@settings(max_examples=200, deadline=None)
def test_floats_read_back_to_the_same_bits_in_as_few_digits_as_possible(
    values: list[float],
) -> None:
    table = pa.table({"x": values})
    texts = value_texts(table)
    assert [bits(float(t)) for t in texts] == [bits(v) for v in values]
    # Python's repr is the shortest form too (its documentation, since 3.1).
    for text, value in zip(texts, values, strict=True):
        if math.isfinite(value):
            digits = [c for c in text.partition("e")[0] if c.isdigit()]
            shortest = [c for c in repr(value).partition("e")[0] if c.isdigit()]
            assert "".join(digits).strip("0") == "".join(shortest).strip("0")
    if all(map(math.isfinite, values)):
        read = [row["x"] for row in json.loads(text_of(table, "json"))]
        assert all(isinstance(x, float) for x in read)
        assert [bits(x) for x in read] == [bits(v) for v in values]


def test_single_floats_take_their_own_fewest_digits() -> None:
    table = pa.table({"x": pa.array([0.1, 16777216.0, 1e20, 3.4e38], pa.float32())})
    assert value_texts(table) == ["0.1", "1.6777216e+07", "1e+20", "3.4e+38"]


def test_numbers_that_are_none() -> None:
    table = pa.table({"x": [math.nan, math.inf, -math.inf, None, -0.0]})
    assert text_of(table, "csv").splitlines() == ["x", "nan", "inf", "-inf", '""', "-0.0"]
    assert [row["x"] for row in json.loads(text_of(table, "json"))] == [
        "NaN",
        "Infinity",
        "-Infinity",
        None,
        -0.0,
    ]
    assert [json.loads(line)["x"] for line in text_of(table, "ndjson").splitlines()][:2] == [
        "NaN",
        "Infinity",
    ]


ODD_TEXTS = [
    "",
    "a",
    'say "so"',
    "a,b",
    "two\nlines",
    "cr\rlf",
    " padded ",
    "=1+1",
    "é日本\U0001f68c",
    "\x00\t",
]


def test_csv_is_read_by_others_as_it_was() -> None:
    table = pa.table({"a,b": ODD_TEXTS, "n": range(len(ODD_TEXTS)), "z": pa.nulls(len(ODD_TEXTS))})
    text = text_of(table, "csv")
    rows = list(csv.reader(io.StringIO(text, newline="")))
    assert rows[0] == ["a,b", "n", "z"]
    assert [row[0] for row in rows[1:]] == ODD_TEXTS
    frame = pd.read_csv(io.StringIO(text, newline=""), keep_default_na=False)
    assert frame["a,b"].tolist() == ODD_TEXTS


def test_csv_tells_empty_from_null_to_the_engine(tmp_path: Path) -> None:
    table = pa.table({"t": ["", None, "x"], "x": [1.5, None, math.inf]})
    path = tmp_path / "a.csv"
    path.write_text(text_of(table, "csv"), newline="")
    sql = "SELECT * FROM read_csv($1, allow_quoted_nulls = false)"
    assert duckdb.execute(sql, [str(path)]).fetchall() == [("", 1.5), (None, None), ("x", math.inf)]


ENGINE_VALUES = [
    ("true", "true", True),
    (
        "170141183460469231731687303715884105727::HUGEINT",
        "170141183460469231731687303715884105727",
        170141183460469231731687303715884105727,
    ),
    ("1.10::DECIMAL(5, 2)", "1.10", 1.1),
    ("0.0000001::DECIMAL(20, 10)", "0.0000001000", 1e-7),
    ("DATE '2031-02-03'", "2031-02-03", "2031-02-03"),
    ("'infinity'::DATE", "infinity", "infinity"),
    ("'-infinity'::TIMESTAMP", "-infinity", "-infinity"),
    ("TIMESTAMP '2031-02-03 04:05:06'", "2031-02-03 04:05:06", "2031-02-03T04:05:06"),
    ("TIMESTAMP '2031-02-03 04:05:00.120'", "2031-02-03 04:05:00.12", "2031-02-03T04:05:00.12"),
    (
        "TIMESTAMP_NS '2031-02-03 04:05:06.123456789'",
        "2031-02-03 04:05:06.123456789",
        "2031-02-03T04:05:06.123456789",
    ),
    ("TIMESTAMP_S '2031-02-03 04:05:00'", "2031-02-03 04:05:00", "2031-02-03T04:05:00"),
    (
        "TIMESTAMPTZ '2031-07-03 04:05:06+00'",
        "2031-07-03 06:05:06+02:00",
        "2031-07-03T06:05:06+02:00",
    ),
    ("TIME '04:05:06.5'", "04:05:06.5", "04:05:06.5"),
    (
        "INTERVAL '14 months 2 days 3.5 seconds'",
        "14 months 2 days 00:00:03.5",
        "14 months 2 days 00:00:03.5",
    ),
    ("INTERVAL '-1 seconds'", "-00:00:01", "-00:00:01"),
    ("INTERVAL '0 days'", "00:00:00", "00:00:00"),
    (
        "'0d6a1a8e-0000-4000-8000-000000000000'::UUID",
        "0d6a1a8e-0000-4000-8000-000000000000",
        "0d6a1a8e-0000-4000-8000-000000000000",
    ),
    ("'tap reader'::ENUM('cash box', 'tap reader')", "tap reader", "tap reader"),
    ("'\\x01a\\xFF'::BLOB", "\\x01a\\xFF", "\\x01a\\xFF"),
    ("[1, NULL, 3]", "[1, null, 3]", [1, None, 3]),
    ("[1.5, 'nan'::DOUBLE]", '[1.5, "NaN"]', [1.5, "NaN"]),
    ("[1, 2]::INTEGER[2]", "[1, 2]", [1, 2]),
    (
        "{'a': [{'b': DATE '2031-01-01'}], 'é': 'say \"so\"'}",
        '{"a": [{"b": "2031-01-01"}], "é": "say \\"so\\""}',
        {"a": [{"b": "2031-01-01"}], "é": 'say "so"'},
    ),
    ("MAP {1: 'x', 2: NULL}", '{"1": "x", "2": null}', {"1": "x", "2": None}),
    ("union_value(num := 1)", "1", 1),
    ("[]", "[]", []),
]


@pytest.mark.parametrize(("sql", "plain", "read"), ENGINE_VALUES)
def test_values_of_the_engine(sql: str, plain: str, read: object) -> None:
    connection = duckdb.connect()
    connection.execute("SET TimeZone = 'Europe/Paris'")
    table = connection.sql(f"SELECT {sql} AS v UNION ALL SELECT NULL").to_arrow_table()
    assert value_texts(table) == [plain, ""]
    assert [row["v"] for row in json.loads(text_of(table, "json"))] == [read, None]
    sliced = table.slice(1)
    assert [row["v"] for row in json.loads(text_of(sliced, "json"))] == [None]
    if not isinstance(read, dict | list) and "union" not in sql:
        again = connection.execute(f"SELECT $1::{_type_of(connection, sql)} = {sql}", [plain])
        assert again.fetchall() == [(True,)]


def _type_of(connection: duckdb.DuckDBPyConnection, sql: str) -> str:
    return str(connection.execute(f"SELECT typeof({sql})").fetchall()[0][0])


NESTED = st.recursive(
    st.none() | st.integers(-(2**62), 2**62) | st.text(max_size=4),
    lambda inner: st.lists(inner, max_size=3),
    max_leaves=6,
)


@given(
    st.lists(
        st.lists(st.lists(st.integers(-9, 9) | st.none(), max_size=3) | st.none(), max_size=3)
    ),
    st.lists(st.fixed_dictionaries({"a": st.text(max_size=3), "b": st.lists(st.booleans())})),
    st.integers(0, 3),
)
@settings(max_examples=100, deadline=None)
def test_nested_values_as_json_agree_with_arrows_own(
    lists: list[object], structs: list[object], skip: int
) -> None:
    for values, kind in (
        (lists, pa.list_(pa.list_(pa.int64()))),
        (structs, pa.struct([("a", pa.string()), ("b", pa.list_(pa.bool_()))])),
    ):
        table = pa.table({"v": pa.array([*values, None], kind)}).slice(skip)
        read = [row["v"] for row in json.loads(text_of(table, "json"))]
        assert read == table.column(0).to_pylist()


def test_python_values_agree_with_arrows_own() -> None:
    table = pa.table(
        {
            "d": [date(2031, 1, 2), None],
            "t": [datetime(2031, 1, 2, 3, 4, 5, 600_000), None],
            "c": [time(1, 2, 3), None],
            "p": [Decimal("-12.50"), None],
        }
    )
    read = json.loads(text_of(table, "json"))[0]
    assert date.fromisoformat(read["d"]) == date(2031, 1, 2)
    assert datetime.fromisoformat(read["t"]) == datetime(2031, 1, 2, 3, 4, 5, 600_000)
    assert time.fromisoformat(read["c"]) == time(1, 2, 3)
    assert (
        text_of(table, "csv").splitlines()[1] == "2031-01-02,2031-01-02 03:04:05.6,01:02:03,-12.50"
    )


def test_several_columns_of_one_name() -> None:
    table = pa.Table.from_arrays([pa.array([1]), pa.array([2]), pa.array([3])], ["n", "n", "n_2"])
    assert text_of(table, "csv") == "n,n,n_2\n1,2,3\n"
    assert json.loads(text_of(table, "json")) == [{"n": 1, "n_3": 2, "n_2": 3}]
    assert unique_names(["a", "a", "a"]) == ["a", "a_2", "a_3"]


@pytest.mark.parametrize("form", FORMATS)
def test_no_rows(form: str) -> None:
    text = text_of(pa.table({"a": pa.array([], pa.float64())}), form)
    assert (
        text
        == {
            "csv": "a\n",
            "json": "[]\n",
            "ndjson": "",
            "markdown": "| a |\n| ---: |\n",
        }[form]
    )


def test_markdown() -> None:
    table = pa.table({"stop|name": ["Mill *Lane*", "a|b\nc", None], "dwell_s": [0.1, 12.0, None]})
    assert text_of(table, "markdown") == (
        "| stop\\|name | dwell_s |\n"
        "| --- | ---: |\n"
        "| Mill \\*Lane\\* | 0.1 |\n"
        "| a\\|b<br>c | 12.0 |\n"
        "| NULL | NULL |\n"
    )


def test_many_rows_keep_their_order() -> None:
    table = pa.table({"i": range(50_000)})
    assert value_texts(table) == [str(i) for i in range(50_000)]
    assert [row["i"] for row in json.loads(text_of(table, "json"))] == list(range(50_000))


def test_an_unknown_format() -> None:
    with pytest.raises(UsageError, match="csv, json, ndjson, markdown"):
        write_text(pa.table({"a": [1]}), "yaml", io.StringIO())


@given(st.lists(st.datetimes() | st.none(), min_size=1, max_size=20), st.sampled_from("T "))
@settings(max_examples=100, deadline=None)
def test_few_and_many_times_are_spelled_alike(values: list[datetime | None], mark: str) -> None:
    columns = [pa.array(values, pa.timestamp("us"))]
    columns.append(pa.array([v and v.date() for v in values], pa.date32()))
    columns.append(pa.array([v and v.replace(microsecond=0) for v in values], pa.timestamp("s")))
    for column in columns:
        assert _few_time_texts(column, mark) == _many_time_texts(column, mark)


@given(st.lists(st.integers(-(2**31), 2**31 - 1) | st.none(), max_size=40), st.integers(0, 9))
@settings(max_examples=100, deadline=None)
def test_numbers_with_gaps_and_from_the_middle_of_an_array(
    values: list[int | None], skip: int
) -> None:
    for kind in (pa.int32(), pa.int64(), pa.float64()):
        column = pa.array(values, kind).slice(skip)
        assert plain_texts(column) == [None if v is None else repr(v) for v in column.to_pylist()]


def test_a_small_answer_is_written_without_arrows_compute_functions() -> None:
    """They take as long to import as the rest of a kept answer takes."""
    day = datetime(2031, 1, 2, 3, 4, 5, 600_000)
    columns = {"r": ["12", None], "n": [1, 2], "x": [0.1, None], "b": [True, None]}
    table = pa.table(
        columns | {"day": [day.date(), None], "t": [day, None], "d": [Decimal(1), None]}
    )
    code = """
import io, sys
from midspread.engine.formatting import FORMATS, write_text
from midspread.engine.store.serialising import from_bytes
for form in FORMATS:
    write_text(from_bytes(bytes.fromhex(sys.argv[1])), form, io.StringIO())
print({"pyarrow.compute", "pandas"} & sys.modules.keys())
"""
    result = subprocess.run(
        [sys.executable, "-c", code, to_bytes(table).hex()],
        capture_output=True,
        text=True,
        check=True,
    )
    assert result.stdout == "set()\n"
