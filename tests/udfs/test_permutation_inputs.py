"""Permutation tests: odd input, labels of every type, and wrong arguments."""

import math
from typing import Any

import duckdb
import numpy as np
import pytest

from midspread.udfs.declaring import ParameterError
from tests.udfs.calling import bits
from tests.udfs.permutations import NOTHING, TWO_LABELS, ask


def test_rows_without_value_or_label_are_skipped(connection: duckdb.DuckDBPyConnection) -> None:
    x = [3.0, 5.0, 4.0, 9.0, 8.0, 7.5]
    labels = ["a", "a", "a", "b", "b", "b"]
    plain = ask(connection, TWO_LABELS.format(""), x=x, label=labels)
    gapped = ask(
        connection,
        TWO_LABELS.format(""),
        x=[None, *x, 100.0, math.nan],
        label=["a", *labels, None, None],
    )
    assert bits(gapped) == bits(plain)


@pytest.mark.parametrize(
    ("x", "labels"),
    [([], []), ([1.0], ["a"]), ([1.0, 2.0, 3.0], ["a"] * 3), ([None, None], ["a", "b"])],
)
def test_one_label_or_none_gives_null(
    connection: duckdb.DuckDBPyConnection, x: list[Any], labels: list[str]
) -> None:
    for call in (TWO_LABELS.format(""), "permutation_test_k(x, label)"):
        answer = ask(connection, call, x=x, label=labels)
        assert answer == (NOTHING if len(x) == 3 else None)


def test_nan_and_too_few(connection: duckdb.DuckDBPyConnection) -> None:
    labels = ["a", "a", "b", "b"]
    for call in (TWO_LABELS.format(""), "permutation_test_k(x, label, 'median')"):
        answer = ask(connection, call, x=[1.0, math.nan, 3.0, 4.0], label=labels)
        assert math.isnan(answer["estimate"]) and math.isnan(answer["p_value"])
        assert answer["resamples"] is None and answer["exact"] is None
    answer = ask(connection, TWO_LABELS.format(", 'sd'"), x=[1.0, 2.0, 3.0], label=["a", "b", "b"])
    assert answer["estimate"] is None and answer["p_value"] is None
    answer = ask(connection, "sign_flip_test(d)", d=[1.0, math.nan])
    assert math.isnan(answer["estimate"]) and math.isnan(answer["p_value"])
    answer = ask(connection, "permutation_test_yx(y, x)", y=[1.0, 2.0], x=[math.nan, 1.0])
    assert math.isnan(answer["estimate"]) and math.isnan(answer["p_value"])


def test_infinities_that_are_cut_do_no_harm(connection: duckdb.DuckDBPyConnection) -> None:
    labels = ["a"] * 10 + ["b"] * 10
    base = [float(i * 7 % 20) for i in range(20)]
    call = TWO_LABELS.format(", 'median', resamples := 500")
    found = []
    for wild in (1e300, math.inf):
        found.append(ask(connection, call, x=[*base[:19], wild], label=labels))
    assert found[0]["estimate"] == found[1]["estimate"]
    mean = ask(
        connection, TWO_LABELS.format(""), x=[1.0, 2.0, 3.0, math.inf], label=["a", "a", "b", "b"]
    )
    assert mean["estimate"] == math.inf and mean["p_value"] == 1.0


def test_equal_values_give_one(connection: duckdb.DuckDBPyConnection) -> None:
    for n in (4, 40):
        for value in (0.1, 1e9 + 0.1, 1e-310, 1.7e308):
            labels = ["a", "b"] * (n // 2)
            for extra in ("", ", studentize := true", ", 'median'"):
                call = TWO_LABELS.format(extra)
                answer = ask(connection, call, x=[value] * n, label=labels)
                assert (answer["estimate"], answer["p_value"]) == (0.0, 1.0)


def test_a_common_shift_changes_nothing(
    connection: duckdb.DuckDBPyConnection, generator: np.random.Generator
) -> None:
    """In eighths, so that the shifted values are exact."""
    x = np.round(generator.lognormal(3.0, 0.7, 60) * 8) / 8
    labels = ["a", "b", "b"] * 20
    for statistic in ("mean", "median", "huber_location"):
        for extra in ("", ", resamples := 100000"):
            call = TWO_LABELS.format(f", '{statistic}', seed := 3{extra}")
            plain = ask(connection, call, x=x, label=labels)
            far = ask(connection, call, x=x + 1e9, label=labels)
            assert far["estimate"] == pytest.approx(plain["estimate"], rel=1e-6)
            # Another content draws other arrangements.
            error = math.sqrt(2 * plain["p_value"] / plain["resamples"])
            assert abs(far["p_value"] - plain["p_value"]) < 5 * error


def test_baseline(connection: duckdb.DuckDBPyConnection) -> None:
    x = [1.0, 2.0, 4.0, 8.0, 16.0]
    labels = ["tap reader", "cash box", "tap reader", "cash box", "cash box"]
    one = ask(connection, TWO_LABELS.format(""), x=x, label=labels)
    assert one["estimate"] == pytest.approx(2.5 - 26 / 3)
    other = ask(connection, TWO_LABELS.format(", baseline := 'tap reader'"), x=x, label=labels)
    assert other["estimate"] == -one["estimate"] and other["p_value"] == one["p_value"]


def test_a_group_without_the_baseline(connection: duckdb.DuckDBPyConnection) -> None:
    """With one label it is NULL as without a baseline; with two others the call is wrong."""
    rows = "(1, 1.0, 'a'), (1, 2.0, 'b'), (2, 3.0, 'b'), (2, 4.0, 'b')"
    query = (
        "SELECT permutation_test(x, label, baseline := 'a') FROM (VALUES {}) AS t(g, x, label) "
        "GROUP BY g ORDER BY g"
    )
    found = [row[0] for row in connection.execute(query.format(rows)).fetchall()]
    assert found[0]["estimate"] == 1.0 and found[1] == NOTHING
    with pytest.raises(duckdb.Error, match="baseline must be a "):
        connection.execute(query.format(rows + ", (2, 5.0, 'c')")).fetchall()


@pytest.mark.parametrize("kind", ["INTEGER", "BOOLEAN", "DATE", "DOUBLE", "DECIMAL(5,1)"])
def test_labels_of_any_simple_type(connection: duckdb.DuckDBPyConnection, kind: str) -> None:
    label = {"DATE": "DATE '2031-03-01' + CAST(i % 2 AS INTEGER)"}.get(kind, f"(i % 2)::{kind}")
    query = f"SELECT permutation_test(i, {label}) FROM range(6) AS t(i)"
    ((answer,),) = connection.execute(query).fetchall()
    assert answer["estimate"] == 1.0 and answer["resamples"] == 20


@pytest.mark.parametrize(
    ("call", "said"),
    [
        ("permutation_test(x, g)", "got 3 (0, 1, 2); keep two of them"),
        ("permutation_test(x, g)", "permutation_test_k."),
        ("permutation_test(x, b, resamples := 0)", "resamples must be a whole number from 1 to"),
        ("permutation_test(x, b, alternative := 'both')", "'two-sided', 'greater' or 'less'"),
        ("permutation_test(x, b, 'nothing')", "statistic must be one of mean, median"),
        ("permutation_test(x, b, 'median', studentize := true)", "needs a statistic with a"),
        ("permutation_test(x, b, baseline := 7)", "baseline must be a value of label, got 7"),
        ("permutation_test(x, b, seed := -1)", "seed must be a whole number"),
        ("permutation_test_k(x, b, resamples := 2.5)", "resamples must be a whole number"),
        ("sign_flip_test(x, 'spearman')", "statistic must be one of mean, median"),
        ("permutation_test_yx(x, b, 'median')", "statistic must be one of"),
    ],
)
def test_one_sentence(connection: duckdb.DuckDBPyConnection, call: str, said: str) -> None:
    source = "(SELECT i * 1.5 AS x, i % 3 AS g, i % 2 AS b FROM range(12) AS t(i))"
    with pytest.raises(duckdb.Error) as caught:
        connection.execute(f"SELECT {call} FROM {source}").fetchall()
    sentence = str(caught.value).split(f"{ParameterError.__name__}: ")[1].strip()
    assert said in sentence and sentence.startswith(call.split("(")[0] + ": ")
    assert "\n" not in sentence and sentence.endswith(".")
