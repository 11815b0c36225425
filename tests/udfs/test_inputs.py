"""Which parameters and which types of column every aggregate takes, and what it says of others."""

import math
from decimal import Decimal

import duckdb
import pytest

from midspread.udfs import Function, Parameter
from tests.udfs.calling import AGGREGATES, NAMES, answers, bits, call, columns_of, table, value_for

each_function = pytest.mark.parametrize("function", AGGREGATES, ids=NAMES)
each_parameter = pytest.mark.parametrize(
    ("function", "parameter"),
    [
        pytest.param(function, parameter, id=f"{function.name}-{parameter.name}")
        for function in AGGREGATES
        for parameter in function.parameters
    ],
)
VALUES = """(VALUES (1.0, 1.0, 2.0), (2.5, 2.0, 1.0), (4.0, 1.0, 7.0), (4.5, 1.0, 2.0),
    (90.0, 3.0, 8.0)) AS visits(x, w, v)"""


def refused(connection: duckdb.DuckDBPyConnection, query: str) -> str:
    """The message of the error that a query ends with."""
    with pytest.raises(duckdb.Error) as caught:
        connection.execute(query).fetchall()
    return str(caught.value)


def outside(parameter: Parameter) -> list[float]:
    """Values that are not allowed, some of them only just."""
    wrong = [math.nan, math.inf, -math.inf]
    if math.isfinite(parameter.low):
        wrong += [math.nextafter(parameter.low, -math.inf), parameter.low - 1.0]
        wrong += [parameter.low] if parameter.low_open else []
    if math.isfinite(parameter.high):
        wrong += [math.nextafter(parameter.high, math.inf), parameter.high + 1.0]
        wrong += [parameter.high] if parameter.high_open else []
    if parameter.whole:
        wrong += [value_for(parameter) + 0.5]
    return wrong


@each_parameter
def test_out_of_range(
    connection: duckdb.DuckDBPyConnection, function: Function, parameter: Parameter
) -> None:
    for wrong in outside(parameter):
        query = f"SELECT {call(function, **{parameter.name: f'{wrong!r}::DOUBLE'})} FROM {VALUES}"
        query = query.replace("nan::", "'nan'::").replace("inf::", "'inf'::").replace("-'", "'-")
        said = refused(connection, query)
        assert f"{function.name}: {parameter.name} must be {parameter.allowed}" in said
        assert f"got {repr(wrong).removesuffix('.0')};" in said
        assert "\n" not in said.strip()


@each_parameter
def test_ends_of_the_range(
    connection: duckdb.DuckDBPyConnection, function: Function, parameter: Parameter
) -> None:
    ends = [parameter.low] * (not parameter.low_open) + [parameter.high] * (not parameter.high_open)
    for end in ends:
        if math.isfinite(end):
            query = f"SELECT {call(function, **{parameter.name: end})} FROM {VALUES}"
            assert connection.execute(query).fetchall()


@each_parameter
def test_null(
    connection: duckdb.DuckDBPyConnection, function: Function, parameter: Parameter
) -> None:
    for null in ("NULL", "NULL::DOUBLE", "NULL::INTEGER"):
        query = f"SELECT {call(function, **{parameter.name: null})} FROM {VALUES}"
        said = refused(connection, query)
        assert f"{function.name}: {parameter.name} must be {parameter.allowed}, got NULL" in said


@each_parameter
def test_wrong_type(
    connection: duckdb.DuckDBPyConnection, function: Function, parameter: Parameter
) -> None:
    for wrong, kind in (("'0.2'", "VARCHAR"), ("true", "BOOLEAN"), ("[1]", "INTEGER[]")):
        query = f"SELECT {call(function, **{parameter.name: wrong})} FROM {VALUES}"
        said = refused(connection, query)
        assert f"{function.name}: {parameter.name} must be {parameter.allowed}, got type" in said
        assert kind in said


@each_parameter
def test_each_group_uses_its_own(
    connection: duckdb.DuckDBPyConnection, function: Function, parameter: Parameter
) -> None:
    """Joined from a table; the same as asking for each group alone."""
    if parameter.whole:
        own = [parameter.low + i for i in range(8)]
    else:
        low = parameter.low if math.isfinite(parameter.low) else 0.0
        high = parameter.high if math.isfinite(parameter.high) else 10.0
        own = [low + (high - low) * i / 10 for i in range(1, 9)]
    values = [[float((i * 7919 + g * 104729) % 1009) for i in range(30 + g)] for g in range(8)]
    alone = [
        answers(connection, function, [group], **{parameter.name: repr(value)})[0]
        for group, value in zip(values, own, strict=True)
    ]
    connection.register("given_groups", table(values))
    connection.execute("CREATE OR REPLACE TEMP TABLE own_values AS FROM given_groups")
    connection.unregister("given_groups")
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE own_parameters AS SELECT unnest(range(8)) AS g, "
        "unnest(?::DOUBLE[]) AS setting",
        [own],
    )
    source = "own_values JOIN own_parameters USING (g)"
    for setting, key in (("any_value(setting)", "g"), ("setting", "g, setting")):
        called = call(function, **{parameter.name: setting})
        together = connection.execute(f"SELECT {called} FROM {source} GROUP BY {key} ORDER BY g")
        assert bits([row[0] for row in together.fetchall()]) == bits(alone)
    connection.execute("INSERT INTO own_parameters VALUES (99, NULL)")
    connection.execute("INSERT INTO own_values VALUES (99, 1, 1, 1)")
    called = call(function, **{parameter.name: "any_value(setting)"})
    assert "got NULL" in refused(connection, f"SELECT {called} FROM {source} GROUP BY g")


@pytest.mark.parametrize("name", [f.name for f in AGGREGATES if f.parameters])
def test_positional_and_named(connection: duckdb.DuckDBPyConnection, name: str) -> None:
    function = AGGREGATES[NAMES.index(name)]
    settings = [repr(value_for(p)) for p in function.parameters]
    columns = ", ".join(columns_of(function))
    named = [f"{p.name} := {s}" for p, s in zip(function.parameters, settings, strict=True)]
    forms = [
        f"{function.name}({columns}, {', '.join(settings)})",
        f"{function.name}({columns}, {', '.join(named)})",
        f"{function.name}({columns}, {', '.join(reversed(named))})",
        call(function),
    ]
    found = [connection.execute(f"SELECT {form} FROM {VALUES}").fetchall() for form in forms]
    assert all(bits(answer) == bits(found[0]) for answer in found)


@pytest.mark.parametrize(
    "kind",
    [
        *("TINYINT", "SMALLINT", "INTEGER", "BIGINT", "HUGEINT", "FLOAT", "DOUBLE"),
        *("UTINYINT", "USMALLINT", "UINTEGER", "UBIGINT", "UHUGEINT"),
        *("DECIMAL(4,1)", "DECIMAL(9,2)", "DECIMAL(18,3)", "DECIMAL(38,5)"),
    ],
)
def test_every_numeric_type(connection: duckdb.DuckDBPyConnection, kind: str) -> None:
    """Whole numbers that every type holds: the same answer as DOUBLE gives, to the bit."""
    values = "(VALUES (3, 1), (100, 2), (7, 1), (7, 3), (21, 1), (NULL, 2), (64, 1)) AS t(x, w)"
    cast = f"(SELECT x::{kind} AS x, w::{kind} AS w, (x % 10)::{kind} AS v FROM {values})"
    double = f"(SELECT x::DOUBLE AS x, w::DOUBLE AS w, (x % 10)::DOUBLE AS v FROM {values})"
    calls = ", ".join(call(function) for function in AGGREGATES)
    found = connection.execute(f"SELECT {calls} FROM {cast}").fetchall()
    assert bits(found) == bits(connection.execute(f"SELECT {calls} FROM {double}").fetchall())


def test_wide_numbers_round_to_double(connection: duckdb.DuckDBPyConnection) -> None:
    wide = Decimal("12345678901234567890.12345")
    for text, expected in (
        (f"{wide}::DECIMAL(38,5)", float(wide)),
        ("170141183460469231731687303715884105727::HUGEINT", float(2**127)),
        ("'-1e30'::FLOAT", -1.0000000150474662e30),
    ):
        query = f"SELECT trimmed_mean(x) FROM (VALUES ({text}), ({text})) AS t(x)"
        assert connection.execute(query).fetchall() == [(expected,)]


WRONG = {
    "VARCHAR": "'3.5'",
    "BOOLEAN": "true",
    "DATE": "DATE '2031-03-07'",
    "TIME": "TIME '07:30:00'",
    "TIMESTAMP": "TIMESTAMP '2031-03-07 07:30:00'",
    "TIMESTAMP WITH TIME ZONE": "TIMESTAMPTZ '2031-03-07 07:30:00+00'",
    "INTERVAL": "INTERVAL 3 SECOND",
    "BLOB": "'x'::BLOB",
    "UUID": "uuid()",
    "INTEGER[]": "[1, 2]",
    "VARCHAR[]": "['a']",
    "DOUBLE[2]": "[1.0, 2.0]::DOUBLE[2]",
    "STRUCT(a INTEGER)": "{'a': 1}",
    "MAP(INTEGER, INTEGER)": "MAP {1: 2}",
}


@each_function
@pytest.mark.parametrize("kind", WRONG)
def test_columns_that_are_not_numbers(
    connection: duckdb.DuckDBPyConnection, function: Function, kind: str
) -> None:
    for column in function.columns:
        given = zip(function.columns, columns_of(function), strict=True)
        taken = [WRONG[kind] if name == column else text for name, text in given]
        for query in (
            f"SELECT {call(function, taken)} FROM {VALUES}",
            f"SELECT w, {call(function, taken)} FROM {VALUES} GROUP BY w",
        ):
            said = refused(connection, query)
            assert f"{function.name}: {column} must be a number" in said
            assert "any integer type, DECIMAL, FLOAT or DOUBLE" in said
            assert f"not {kind}" in said


def test_weights_below_zero(connection: duckdb.DuckDBPyConnection) -> None:
    for function in AGGREGATES:
        if "w" in function.columns:
            taken = ("x", "-w")
            said = refused(connection, f"SELECT {call(function, taken)} FROM {VALUES}")
            assert f"{function.name}: weights must be 0 or more, got -" in said
