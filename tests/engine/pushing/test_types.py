"""Every type arrives exactly, or is refused with the column's name."""

from typing import Any

import pytest

from midspread.engine.errors import MidspreadError
from tests.engine.pushing.conftest import InDuckdb, Keep, Push, Warehouse

# What each kind of database gives back as text.
EXACT = [
    ("9007199254740993::BIGINT", "9007199254740993"),
    ("9007199254740993::HUGEINT", "9007199254740993"),
    ("255::UTINYINT", "255"),
    ("4294967295::UINTEGER", "4294967295"),
    ("12345678901234567890.123456789::DECIMAL(38, 9)", "12345678901234567890.123456789"),
    ("1.10::DECIMAL(4, 2)", "1.10"),
    ("0.1::DOUBLE", "0.1"),
    ("1.7976931348623157e308::DOUBLE", "1.7976931348623157e+308"),
    ("'inf'::DOUBLE", "inf"),
    ("1.5::FLOAT", "1.5"),
    ("DATE '2031-02-28'", "2031-02-28"),
    ("TIMESTAMP '2031-02-28 23:59:59.123456'", "2031-02-28 23:59:59.123456"),
    ("TIME '23:59:59.5'", "23:59:59.5"),
    ("'00112233-4455-6677-8899-aabbccddeeff'::UUID", "00112233-4455-6677-8899-aabbccddeeff"),
    ("'tap reader'::ENUM('cash box', 'tap reader')", "tap reader"),
    ("'Ös''by \\ 🚌'", "Ös'by \\ 🚌"),
    ("''", ""),
    ("NULL::DATE", None),
    ("NULL::DECIMAL(4, 2)", None),
]
LARGE = "170141183460469231731687303715884105727"


def test_values_come_back_digit_by_digit(warehouse: Warehouse, kept: Keep, pushed: Push) -> None:
    listed = ", ".join(f"{sql} AS c{i}" for i, (sql, _) in enumerate(EXACT))
    kept("values_there", f"SELECT 1 AS k, {listed}", key=["k"])
    pushed("values_there", "wh.there")
    for i, (sql, expected) in enumerate(EXACT):
        ((value,),) = warehouse.run(f"SELECT c{i} FROM there")
        assert spelt(value, expected) == expected, sql
    assert pushed("values_there", "wh.there", "merge").outcome.changed == 0
    assert pushed("values_there", "wh.there", "replace").outcome.left == 1


def spelt(value: Any, expected: str | None) -> str | None:
    """A value as the engine writes it."""
    if value is None:
        return None
    text = value.isoformat(" ") if hasattr(value, "hour") and hasattr(value, "day") else str(value)
    return text.rstrip("0") if expected and ":" in expected and "." in text else text


def test_booleans_bytes_and_moments(warehouse: Warehouse, kept: Keep, pushed: Push) -> None:
    kept(
        "odd",
        "SELECT true AS yes, false AS no, '\\x00\\xFF'::BLOB AS bytes,"
        " TIMESTAMPTZ '2031-07-01 12:00:00+02' AS moment",
        key=[],
    )
    pushed("odd", "wh.odd")
    ((yes, no, content),) = warehouse.run("SELECT yes, no, bytes FROM odd")
    assert (bool(yes), bool(no), bytes(content)) == (True, False, b"\x00\xff")
    if warehouse.kind == "sqlite":
        assert warehouse.run("SELECT moment FROM odd") == [("2031-07-01 10:00:00+00",)]
    else:
        same = "moment = TIMESTAMPTZ '2031-07-01 10:00:00+00'"
        assert warehouse.run(f"SELECT {same} FROM odd") == [(True,)]


def test_whole_numbers_of_over_64_bits(warehouse: Warehouse, kept: Keep, pushed: Push) -> None:
    kept("large", f"SELECT {LARGE}::HUGEINT AS total", key=[])
    if warehouse.kind == "sqlite":
        with pytest.raises(MidspreadError, match="the column total has a whole number of over 64"):
            pushed("large", "wh.large")
        assert warehouse.run("SELECT count(*) FROM sqlite_master") == [(0,)]
    else:
        pushed("large", "wh.large")
        assert warehouse.run("SELECT CAST(total AS VARCHAR(50)) FROM large") == [(LARGE,)]


def test_nan(warehouse: Warehouse, kept: Keep, pushed: Push) -> None:
    kept("wild", "SELECT 1 AS k, 'nan'::DOUBLE AS dwell_s", key=["k"])
    if warehouse.kind == "sqlite":
        with pytest.raises(MidspreadError, match="the column dwell_s has NaN"):
            pushed("wild", "wh.wild")
    else:
        pushed("wild", "wh.wild")
        assert pushed("wild", "wh.wild", "merge").outcome.changed == 0


@pytest.mark.parametrize(
    "sql",
    [
        "{'lower': 1.5, 'upper': 2.5}",
        "MAP {'a': 1}",
        "[[1, 2], [3]]",
        "[{'a': 1}]",
        "[1.10::DECIMAL(4, 2)]",
        "TIMESTAMP_NS '2031-01-01 00:00:00.123456789'",
    ],
)
def test_what_only_the_engine_holds(
    warehouse: Warehouse, kept: Keep, pushed: Push, sql: str
) -> None:
    kept("nested", f"SELECT 1 AS k, {sql} AS inner_value", key=["k"])
    if isinstance(warehouse, InDuckdb):
        pushed("nested", "wh.nested")
        assert pushed("nested", "wh.nested", "merge").outcome.changed == 0
    elif warehouse.kind == "sqlite" and sql.startswith("TIMESTAMP_NS"):
        pushed("nested", "wh.nested")
        text = "2031-01-01 00:00:00.123456789"
        assert warehouse.run("SELECT inner_value FROM nested") == [(text,)]
    else:
        with pytest.raises(MidspreadError, match="the column inner_value is"):
            pushed("nested", "wh.nested")


def test_lists_of_plain_values(warehouse: Warehouse, kept: Keep, pushed: Push) -> None:
    kept("lists", "SELECT [1.5::DOUBLE, NULL] AS a, ['x', 'y'] AS b", key=[])
    if warehouse.kind == "sqlite":
        with pytest.raises(MidspreadError, match=r"the column a is DOUBLE\[\].*to_json\(a\)"):
            pushed("lists", "wh.lists")
    else:
        pushed("lists", "wh.lists")
        assert warehouse.run("SELECT a, b FROM lists") == [([1.5, None], ["x", "y"])]
