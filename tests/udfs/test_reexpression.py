"""Re-expressions of single rows: order, domains, the way back, parameters by row."""

import itertools
import math
from typing import Any

import duckdb
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from midspread.udfs import functions
from midspread.udfs.reexpression.box_cox import (
    box_cox,
    box_cox_back,
    yeo_johnson,
    yeo_johnson_back,
)

REPRODUCIBLE = settings(max_examples=150, deadline=None, derandomize=True)
POWERS = st.sampled_from([-3.0, -2.0, -1.0, -0.5, -1e-9, 0.0, 1e-9, 0.5, 1.0, 2.0, 3.0])
POWERS |= st.floats(-4.0, 4.0)
POSITIVE = st.floats(1e-12, 1e12)
LISTS = st.lists(POSITIVE, min_size=2, max_size=30)
ONE_PARAMETER = [
    f.name for f in functions().values() if f.family == "re-expression" and f.kind == "row"
]
ONE_PARAMETER.remove("normal_score")


def applied(connection: duckdb.DuckDBPyConnection, call: str, x: list[Any]) -> list[float | None]:
    """A call on each value of the column x, in order."""
    query = (
        f"SELECT {call} FROM (SELECT unnest(?::DOUBLE[]) AS x, unnest(range(?)) AS i) ORDER BY i"
    )
    return [row[0] for row in connection.execute(query, [x, len(x)]).fetchall()]


def number(connection: duckdb.DuckDBPyConnection, call: str) -> float | None:
    ((found,),) = connection.execute(f"SELECT {call}").fetchall()
    assert found is None or isinstance(found, float)
    return found


@REPRODUCIBLE
@given(x=LISTS, power=POWERS)
@pytest.mark.parametrize("name", ["rung", "box_cox", "yeo_johnson"])
def test_order_is_kept(
    connection: duckdb.DuckDBPyConnection, name: str, x: list[float], power: float
) -> None:
    """Larger values never get smaller, but for rounding in the last places."""
    values = [-v for v in x[1::2]] + x if name == "yeo_johnson" else x
    ordered = sorted(values)
    found = applied(connection, f"{name}(x, {power!r})", ordered)
    for low, high in itertools.pairwise(found):
        assert low is not None and high is not None
        assert high >= low - 1e-13 * abs(low)
    apart = [ordered[0], ordered[-1]]
    # A bare power next to 0 is next to 1 for every value; the other families are divided by it.
    tells = power == 0.0 or abs(power) > 0.01 or name != "rung"
    if apart[1] > apart[0] * 1.001 > 0 and abs(power) < 1.0 and tells:
        assert found[0] < found[-1]  # type: ignore[operator]


@REPRODUCIBLE
@given(f=st.lists(st.floats(0.0, 1.0), min_size=2, max_size=30), power=POWERS)
def test_folded_powers_keep_order_and_fold(
    connection: duckdb.DuckDBPyConnection, f: list[float], power: float
) -> None:
    found = [
        v for v in applied(connection, f"folded_power(x, {power!r})", sorted(f)) if v is not None
    ]
    assert len(found) == sum(power > 0 or 0 < v < 1 for v in f)
    for low, high in itertools.pairwise(found):
        assert high >= low - 1e-13 * abs(low)
    halves = [0.5 + round(v * 2**20) / 2**21 for v in f]  # 1 − f is exact for them
    upper = applied(connection, f"folded_power(x, {power!r})", halves)
    lower = applied(connection, f"folded_power(1 - x, {power!r})", halves)
    assert lower == [None if v is None else -v for v in upper]


@REPRODUCIBLE
@given(x=POSITIVE, power=POWERS)
def test_box_cox_and_back(connection: duckdb.DuckDBPyConnection, x: float, power: float) -> None:
    """To 1e-12, where the way there has not rounded the value away: x^power not far below 1."""
    if power * math.log(x) < -3.0:
        return
    (back,) = applied(connection, f"box_cox_back(box_cox(x, {power!r}), {power!r})", [x])
    assert back == pytest.approx(x, rel=1e-12, abs=0.0)


@REPRODUCIBLE
@given(x=st.floats(-1e12, 1e12), power=POWERS)
def test_yeo_johnson_and_back(
    connection: duckdb.DuckDBPyConnection, x: float, power: float
) -> None:
    used = power if x >= 0 else 2 - power
    if used * math.log1p(abs(x)) < -3.0:
        return
    call = f"yeo_johnson_back(yeo_johnson(x, {power!r}), {power!r})"
    (back,) = applied(connection, call, [x])
    assert back == pytest.approx(x, rel=1e-12, abs=0.0)


@REPRODUCIBLE
@given(v=st.floats(-20.0, 20.0), power=POWERS)
def test_there_from_back(connection: duckdb.DuckDBPyConnection, v: float, power: float) -> None:
    """Where a way back exists it leads there again; where none does, it says NULL."""
    (found,) = applied(connection, f"box_cox_back(x, {power!r})", [v])
    if power * v < -1:
        assert found is None
    elif 1 + power * v > 1e-6:
        # x carries 16 digits, so its logarithm as many decimals.
        there = box_cox(*arrays(found, power))[0]
        assert there == pytest.approx(v, rel=1e-12, abs=1e-13 * (1 + abs(power * v)))
    (found,) = applied(connection, f"yeo_johnson_back(x, {power!r})", [v])
    used = power if v >= 0 else 2 - power
    if used * abs(v) < -1:
        assert found is None
    elif 1 + used * abs(v) > 1e-6:
        there = yeo_johnson(*arrays(found, power))[0]
        assert there == pytest.approx(v, rel=1e-12, abs=1e-300)


def arrays(*values: Any) -> list[Any]:
    return [np.array([value], dtype=np.float64) for value in values]


def test_smooth_through_the_logarithm() -> None:
    """box_cox(x, λ) = L + λL²/2 + …, L = ln x: all digits at a power where x^λ − 1 keeps none."""
    for x in (1e-5, 0.3, 1 + 1e-12, 2.0, 1e9):
        log = math.log(x)
        for power in (1e-300, 1e-17, 1e-12, -1e-12, 5e-324):
            expected = log * (1 + power * log / 2)
            assert box_cox(*arrays(x, power))[0] == pytest.approx(expected, rel=1e-15, abs=0.0)
            back = box_cox_back(*arrays(expected, power))[0]
            assert back == pytest.approx(x, rel=1e-14, abs=0.0)
            again = yeo_johnson(*arrays(x, power))[0]
            expected = math.log1p(x) * (1 + power * math.log1p(x) / 2)
            assert again == pytest.approx(expected, rel=1e-15, abs=0.0)
            assert yeo_johnson_back(*arrays(expected, power))[0] == pytest.approx(x, rel=1e-14)


def test_outside_the_domain_is_null(connection: duckdb.DuckDBPyConnection) -> None:
    nulls = ["rung(-3, 2)", "rung(-3, 0)", "rung(0, 0)", "rung(0, -1)", "rung(-0.0::DOUBLE, 0)"]
    nulls += ["box_cox(-3, 1)", "box_cox(0, 0)", "box_cox(0, -1)", "box_cox_back(-0.6, 2)"]
    nulls += ["box_cox_back(2.1, -0.5)", "yeo_johnson_back(2.1, -0.5)"]
    nulls += ["yeo_johnson_back(-2.1, 2.5)", "folded_power(0, 0)", "folded_power(1, -1)"]
    nulls += ["folded_power(1.001, 1)", "folded_power(-0.001, 1)", "started_log(-0.5, 0.5)"]
    nulls += ["normal_score(0.9, 10)", "normal_score(10.1, 10)", "normal_score(1, 0)"]
    nulls += ["rung(NULL, 1)", "box_cox(NULL, 1)", "normal_score(NULL, 3)", "normal_score(1, NULL)"]
    for call in nulls:
        assert number(connection, call) is None, call


def test_ends_of_the_domain(connection: duckdb.DuckDBPyConnection) -> None:
    ends = {
        "rung(-3, 1)": -3.0,
        "rung(0, 0.5)": 0.0,
        "rung('inf'::DOUBLE, -1)": 0.0,
        "rung('inf'::DOUBLE, 0)": math.inf,
        "rung('-inf'::DOUBLE, 1)": -math.inf,
        "rung(1e300, 2)": math.inf,
        "rung(1e-300, -2)": -math.inf,
        "box_cox(0, 2)": -0.5,
        "box_cox('inf'::DOUBLE, -2)": 0.5,
        "box_cox('inf'::DOUBLE, 0)": math.inf,
        "box_cox(1e300, 2)": math.inf,
        "box_cox_back(-0.5, 2)": 0.0,
        "box_cox_back(0.5, -2)": math.inf,
        "box_cox_back(800, 0)": math.inf,
        "box_cox_back('inf'::DOUBLE, 0.5)": math.inf,
        "yeo_johnson('-inf'::DOUBLE, 2)": -math.inf,
        "yeo_johnson('-inf'::DOUBLE, 4)": -0.5,
        "yeo_johnson_back(-0.5, 4)": -math.inf,
        "yeo_johnson_back(0.5, -2)": math.inf,
        "folded_power(0, 0.5)": -2.0,
        "folded_power(1, 0.5)": 2.0,
        "folded_power(1e-300, -2)": -math.inf,
        "started_log(0, 1)": 0.0,
        "started_log('inf'::DOUBLE, 1)": math.inf,
        "normal_score(1, 1)": 0.0,
    }
    for call, expected in ends.items():
        assert number(connection, call) == expected, call


@pytest.mark.parametrize("name", ONE_PARAMETER)
def test_nan_stays_nan_and_zero_has_no_sign(
    connection: duckdb.DuckDBPyConnection, name: str
) -> None:
    for power in (-1.0, 0.0, 1.0, 2.5):
        ((nan, plus, minus),) = connection.execute(
            f"SELECT {name}('nan'::DOUBLE, {power}), {name}(0.0::DOUBLE, {power}), "
            f"{name}(-0.0::DOUBLE, {power})"
        ).fetchall()
        assert math.isnan(nan)
        assert plus == minus
        if plus == 0.0:
            assert math.copysign(1.0, plus) == math.copysign(1.0, minus) == 1.0


@pytest.mark.parametrize("name", ONE_PARAMETER)
def test_parameter_by_row(connection: duckdb.DuckDBPyConnection, name: str) -> None:
    x = [0.1, 0.2, 0.3, 0.4, 0.6]
    powers = [-1.0, -0.5, 0.0, 0.5, 2.0]
    together = connection.execute(
        f"SELECT {name}(x, p) FROM (SELECT unnest(?::DOUBLE[]) AS x, unnest(?::DOUBLE[]) AS p)",
        [x, powers],
    ).fetchall()
    alone = [number(connection, f"{name}({a}, {b})") for a, b in zip(x, powers, strict=True)]
    assert [row[0] for row in together] == alone


@pytest.mark.parametrize("name", ONE_PARAMETER)
def test_wrong_parameters(connection: duckdb.DuckDBPyConnection, name: str) -> None:
    parameter = functions()[name].parameters[0].name
    for wrong in ("NULL", "'nan'::DOUBLE", "'inf'::DOUBLE", "'-inf'::DOUBLE", "'text'", "true"):
        with pytest.raises(duckdb.Error) as caught:
            connection.execute(f"SELECT {name}(0.5, {wrong})").fetchall()
        assert f"{name}: {parameter} must be a number, got " in str(caught.value)
    with pytest.raises(duckdb.Error, match="must be a number"):
        connection.execute(f"SELECT {name}(DATE '2031-03-07', 1)").fetchall()


@REPRODUCIBLE
@given(n=st.integers(1, 10**6), data=st.data())
def test_normal_scores_mirror_and_rise(
    connection: duckdb.DuckDBPyConnection, n: int, data: st.DataObject
) -> None:
    rank = data.draw(st.integers(1, n))
    low = number(connection, f"normal_score({rank}, {n})")
    high = number(connection, f"normal_score({n} + 1 - {rank}, {n})")
    assert low is not None and high == -low
    if rank < n:
        after = number(connection, f"normal_score({rank} + 1, {n})")
        assert after is not None and after > low
