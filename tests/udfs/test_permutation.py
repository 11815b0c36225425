"""Permutation tests: every arrangement by hand, p under the null, odd input, the same bits."""

import itertools
import math
import threading
import time
from collections.abc import Callable, Sequence
from typing import Any

import duckdb
import numpy as np
import pytest
import scipy.stats
from hypothesis import given, settings
from hypothesis import strategies as st

from midspread.udfs import register
from midspread.udfs.declaring import ParameterError
from midspread.udfs.grouped import Control
from tests.udfs.calling import bits

Statistic = Callable[[np.ndarray], float]
NUMPY: dict[str, Statistic] = {
    "mean": lambda x: float(np.mean(x)),
    "median": lambda x: float(np.median(x)),
    "trimmed_mean(0.2)": lambda x: float(scipy.stats.trim_mean(x, 0.2)),
}
TWO_LABELS = "permutation_test(x, label{})"
NOTHING = dict.fromkeys(("estimate", "p_value", "resamples", "exact"))


def ask(connection: duckdb.DuckDBPyConnection, call: str, **columns: Sequence[Any]) -> Any:
    """The answer of one call over columns given as lists."""
    kinds = {"label": "VARCHAR", "stratum": "INTEGER"}
    lists = ", ".join(f"unnest(${c}::{kinds.get(c, 'DOUBLE')}[]) AS {c}" for c in columns)
    given = {name: np.array(values, object).tolist() for name, values in columns.items()}
    ((answer,),) = connection.execute(f"SELECT {call} FROM (SELECT {lists})", given).fetchall()
    return answer


def share(draws: Sequence[float], observed: float, alternative: str) -> float:
    """The share of values at least as extreme, ties to twelve digits among them."""
    t = np.array(draws)
    tolerance = 1e-12 * np.abs(t).max(initial=abs(observed))
    if alternative == "two-sided":
        return float(np.mean(np.abs(t) >= abs(observed) - tolerance))
    t, observed = (t, observed) if alternative == "greater" else (-t, -observed)
    return float(np.mean(t >= observed - tolerance))


def arrangements(labels: Sequence[str], strata: Sequence[int]) -> list[tuple[str, ...]]:
    """Every distinct way to rearrange labels within strata."""
    places = [[i for i, s in enumerate(strata) if s == own] for own in sorted(set(strata))]
    choices = [sorted(set(itertools.permutations([labels[i] for i in own]))) for own in places]
    found = []
    for parts in itertools.product(*choices):
        arranged = [""] * len(labels)
        for own, part in zip(places, parts, strict=True):
            for i, label in zip(own, part, strict=True):
                arranged[i] = label
        found.append(tuple(arranged))
    return found


tenths = st.integers(-40, 40).map(lambda v: v / 10)
labelled = st.lists(
    st.tuples(tenths, st.sampled_from("ab"), st.integers(0, 1)), min_size=2, max_size=7
)


@settings(max_examples=60, deadline=None)
@given(
    rows=labelled,
    alternative=st.sampled_from(("two-sided", "greater", "less")),
    statistic=st.sampled_from(sorted(NUMPY)),
    with_stratum=st.booleans(),
)
def test_every_arrangement_of_two_labels(
    connection: duckdb.DuckDBPyConnection,
    rows: list[tuple[float, str, int]],
    alternative: str,
    statistic: str,
    with_stratum: bool,
) -> None:
    x, labels, strata = zip(*rows, strict=True)
    if not with_stratum:
        strata = (0,) * len(x)
    call = TWO_LABELS.format(
        f", '{statistic}', alternative := '{alternative}'"
        + (", stratum := stratum" if with_stratum else "")
    )
    answer = ask(connection, call, x=x, label=labels, stratum=strata)
    if len(set(labels)) == 1:
        assert answer == NOTHING
        return
    compute, values = NUMPY[statistic], np.array(x)

    def difference(arranged: Sequence[str]) -> float:
        is_b = np.array(arranged) == "b"
        return compute(values[is_b]) - compute(values[~is_b])

    every = arrangements(labels, strata)
    assert answer["estimate"] == pytest.approx(difference(labels), rel=1e-12, abs=1e-13)
    assert answer["exact"] is True and answer["resamples"] == len(every)
    expected = share([difference(a) for a in every], difference(labels), alternative)
    assert answer["p_value"] == pytest.approx(expected, rel=1e-12)


@settings(max_examples=40, deadline=None)
@given(
    rows=st.lists(st.tuples(tenths, st.sampled_from("abc")), min_size=3, max_size=7),
    statistic=st.sampled_from(sorted(NUMPY)),
)
def test_every_arrangement_of_several_labels(
    connection: duckdb.DuckDBPyConnection, rows: list[tuple[float, str]], statistic: str
) -> None:
    x, labels = zip(*rows, strict=True)
    answer = ask(connection, f"permutation_test_k(x, label, '{statistic}')", x=x, label=labels)
    if len(set(labels)) == 1:
        assert answer == NOTHING
        return
    compute, values = NUMPY[statistic], np.array(x)

    def between(arranged: Sequence[str]) -> float:
        parts = [values[np.array(arranged) == label] for label in sorted(set(labels))]
        sizes, figures = [part.size for part in parts], [compute(part) for part in parts]
        away = np.array(figures) - np.average(figures, weights=sizes)
        return float(np.sum(np.array(sizes) * away**2))

    every = arrangements(labels, (0,) * len(x))
    assert answer["resamples"] == len(every) and answer["exact"]
    assert answer["estimate"] == pytest.approx(between(labels), rel=1e-11, abs=1e-20)
    draws = [between(a) for a in every]
    assert answer["p_value"] == pytest.approx(share(draws, between(labels), "greater"), rel=1e-12)


@settings(max_examples=40, deadline=None)
@given(
    d=st.lists(tenths, min_size=2, max_size=9),
    alternative=st.sampled_from(("two-sided", "greater", "less")),
    statistic=st.sampled_from(sorted(NUMPY)),
)
def test_every_flip(
    connection: duckdb.DuckDBPyConnection, d: list[float], alternative: str, statistic: str
) -> None:
    answer = ask(connection, f"sign_flip_test(d, '{statistic}', '{alternative}')", d=d)
    compute = NUMPY[statistic]
    draws = [compute(np.array(d) * s) for s in itertools.product((1.0, -1.0), repeat=len(d))]
    assert answer["resamples"] == len(draws) and answer["exact"]
    expected = share(draws, compute(np.array(d)), alternative)
    assert answer["p_value"] == pytest.approx(expected, rel=1e-12)


@settings(max_examples=25, deadline=None)
@given(
    rows=st.lists(st.tuples(tenths, st.integers(0, 3)), min_size=3, max_size=5),
    strata=st.lists(st.integers(0, 1), min_size=5, max_size=5),
)
def test_every_order_of_pairs(
    connection: duckdb.DuckDBPyConnection, rows: list[tuple[float, int]], strata: list[int]
) -> None:
    y, x = zip(*rows, strict=True)
    strata = strata[: len(y)]
    call = "permutation_test_yx(y, x, 'kendall_tau', stratum := stratum)"
    answer = ask(connection, call, y=y, x=x, stratum=strata)
    if len(set(y)) == 1 or len(set(x)) == 1:
        assert answer["estimate"] is None and answer["p_value"] is None
        return
    orders = arrangements([str(i) for i in range(len(x))], strata)
    draws = [scipy.stats.kendalltau(y, [x[int(i)] for i in o]).statistic for o in orders]
    observed = scipy.stats.kendalltau(y, x).statistic
    assert answer["exact"] and answer["resamples"] == len(orders)
    assert answer["p_value"] == pytest.approx(share(draws, observed, "two-sided"), rel=1e-12)


def many_groups(
    connection: duckdb.DuckDBPyConnection, call: str, sets: np.ndarray, labels: Sequence[str]
) -> list[Any]:
    """One answer for each row of `sets`, whose columns have labels."""
    count, n = sets.shape
    frame = {
        "g": np.repeat(np.arange(count), n),
        "x": sets.reshape(-1),
        "label": np.tile(np.array(labels, dtype=object), count),
    }
    import pyarrow as pa

    connection.register("many_sets", pa.table({k: pa.array(v) for k, v in frame.items()}))
    try:
        query = f"SELECT {call} FROM many_sets GROUP BY g ORDER BY g"
        return [row[0] for row in connection.execute(query).fetchall()]
    finally:
        connection.unregister("many_sets")


@pytest.mark.parametrize(
    "call",
    [
        "permutation_test(x, label, resamples := 499)",
        "permutation_test(x, label, 'median', resamples := 499)",
        "permutation_test(x, label, studentize := true, resamples := 499)",
        "permutation_test_k(x, label, resamples := 499)",
        "sign_flip_test(x, resamples := 499)",
        "permutation_test_yx(x, hash(x, g) % 1000003, resamples := 499)",
    ],
)
def test_p_is_uniform_under_the_null(
    connection: duckdb.DuckDBPyConnection, call: str, generator: np.random.Generator
) -> None:
    sets = generator.normal(size=(1000, 32))
    answers = many_groups(connection, call, sets, ["a"] * 12 + ["b"] * 20)
    p = np.array([answer["p_value"] for answer in answers])
    assert not any(answer["exact"] for answer in answers)
    # Multiples of 1/500; spread over the steps they are uniform. A right test fails once in 1,000.
    spread = p - generator.uniform(0.0, 1 / 500, p.size)
    assert scipy.stats.kstest(spread, "uniform").pvalue > 1e-3


@pytest.mark.parametrize("statistic", ["mean", "median"])
@pytest.mark.parametrize("first", [3, 12])
def test_level_with_ties_and_unequal_sizes(
    connection: duckdb.DuckDBPyConnection,
    generator: np.random.Generator,
    statistic: str,
    first: int,
) -> None:
    """Never above the nominal level, up to four standard errors of the simulation."""
    sets = np.floor(generator.exponential(2.0, size=(2000, 40)))
    call = f"permutation_test(x, label, '{statistic}', resamples := 399)"
    answers = many_groups(connection, call, sets, ["a"] * first + ["b"] * (40 - first))
    p = np.array([answer["p_value"] for answer in answers])
    for level in (0.01, 0.05, 0.2):
        assert np.mean(p <= level) < level + 4 * math.sqrt(level * (1 - level) / p.size)


@pytest.mark.parametrize("statistic", ["mean", "trimmed_mean(0.1)"])
def test_studentized_keeps_the_level_with_unequal_spread(
    connection: duckdb.DuckDBPyConnection, generator: np.random.Generator, statistic: str
) -> None:
    """20 against 80 values with spreads 3 to 1."""
    sets = generator.normal(size=(1500, 100))
    sets[:, :20] *= 3.0
    labels = ["a"] * 20 + ["b"] * 80
    rejected = {}
    for studentize in ("false", "true"):
        call = (
            f"permutation_test(x, label, '{statistic}', resamples := 399, "
            f"studentize := {studentize})"
        )
        answers = many_groups(connection, call, sets, labels)
        rejected[studentize] = np.mean([answer["p_value"] <= 0.05 for answer in answers])
    assert 0.20 < rejected["false"] < (0.29 if statistic == "mean" else 0.45)
    assert 0.03 < rejected["true"] < 0.075


def test_large_groups_reject_as_theory_says(
    connection: duckdb.DuckDBPyConnection, generator: np.random.Generator
) -> None:
    """Against the normal limit: within five standard errors of the 4,000 arrangements."""
    n = 40_000
    x = generator.normal(size=n)
    for ones in (20_000, 12_345, 3_000, 700, 21):
        labels = np.where(np.arange(n) < ones, "b", "a")
        shifted = x + np.where(labels == "b", 1.3 / math.sqrt(ones), 0.0)
        for extra in ("", ", studentize := true"):
            call = TWO_LABELS.format(f", 'mean', 'greater', 4000{extra}")
            answer = ask(connection, call, x=shifted, label=labels)
            b, a = shifted[labels == "b"], shifted[labels == "a"]
            assert answer["estimate"] == pytest.approx(b.mean() - a.mean(), rel=1e-9)
            z = (b.mean() - a.mean()) / (shifted.std() * math.sqrt(1 / b.size + 1 / a.size))
            if extra:
                z = (b.mean() - a.mean()) / math.sqrt(b.var() / b.size + a.var() / a.size)
            expected = scipy.stats.norm.sf(z)
            error = math.sqrt(expected * (1 - expected) / 4000)
            # The limit itself is off by little for 21 values.
            assert abs(answer["p_value"] - expected) < 5 * error + (0.02 if ones < 100 else 0.002)
            assert not answer["exact"]


@pytest.mark.parametrize(("n", "ones"), [(60, 7), (300, 150), (5000, 4100)])
def test_drawn_ranks_as_rearranged_values(
    connection: duckdb.DuckDBPyConnection, generator: np.random.Generator, n: int, ones: int
) -> None:
    """p of 4,000 arrangements against as many by numpy, within five Monte Carlo errors."""
    x = np.round(generator.lognormal(size=n), 2)
    x[:ones] += 0.8 / math.sqrt(min(ones, n - ones))
    labels = np.where(np.arange(n) < ones, "b", "a")
    compute: dict[str, Callable[..., Any]] = {
        "median": np.median,
        "quantile_hf(0.9)": lambda v, axis: np.quantile(v, 0.9, axis=axis),
        "iqr_scale": scipy.stats.iqr,
    }
    rearranged = np.stack([generator.permutation(x) for _ in range(4000)])
    for statistic, of in compute.items():
        call = TWO_LABELS.format(f", '{statistic}', 'greater', 4000")
        answer = ask(connection, call, x=x, label=labels)
        observed = of(x[:ones], axis=0) - of(x[ones:], axis=0)
        draws = of(rearranged[:, :ones], axis=1) - of(rearranged[:, ones:], axis=1)
        expected = float((draws >= observed - 1e-9).mean())
        error = math.sqrt(2 * expected * (1 - expected) / 4000)
        assert abs(answer["p_value"] - expected) < 5 * error + 1e-3


def test_sums_and_kernel_agree_on_means(
    connection: duckdb.DuckDBPyConnection, generator: np.random.Generator
) -> None:
    """winsorized_mean(0) is the mean too, computed anew for each arrangement."""
    for n, ones in ((60, 30), (200, 20), (3000, 1100)):
        x = generator.lognormal(size=n)
        labels = np.where(np.arange(n) < ones, "b", "a")
        strata = np.arange(n) % 3
        for extra in ("", ", stratum := stratum"):
            p = [
                ask(
                    connection,
                    TWO_LABELS.format(f", '{s}', resamples := 6000{extra}"),
                    x=x,
                    label=labels,
                    stratum=strata,
                )["p_value"]
                for s in ("mean", "winsorized_mean(0)")
            ]
            error = math.sqrt(2 * p[0] * (1 - p[0]) / 6000)
            assert abs(p[0] - p[1]) < 5 * error + 1e-3


# Odd input.


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


# The same bits.

CALLS = (
    "permutation_test(x, label, resamples := 3000)",
    "permutation_test(x, label, studentize := true, stratum := s, resamples := 500)",
    "permutation_test(x, label, 'median', resamples := 900)",
    "permutation_test(x, label, 'median', stratum := s, resamples := 300)",
    "permutation_test_k(x, s, resamples := 300)",
    "permutation_test_k(x, s, 'trimmed_mean(0.2)', stratum := label, resamples := 200)",
    "sign_flip_test(x - 12, resamples := 3000)",
    "sign_flip_test(x - 12, 'trimmed_mean(0.2)', resamples := 300)",
    "permutation_test_yx(x, s, resamples := 200)",
    "permutation_test_yx(x, v, 'kendall_tau', stratum := s, resamples := 100)",
)


@pytest.mark.parametrize("call", CALLS)
def test_same_bits_for_any_threads_and_any_order(call: str) -> None:
    found = []
    for threads, order in ((1, "i"), (2, "hash(i)"), (4, "-i")):
        with duckdb.connect(config={"threads": threads}) as connection:
            register(connection, threads=threads)
            connection.execute(
                "CREATE TABLE t AS SELECT CASE WHEN i < 30000 THEN 0 ELSE 1 + i % 40 END AS g, "
                "(hash(i) % 200) / 8.0 AS x, (hash(i + 3) % 50)::DOUBLE AS v, "
                "CASE WHEN hash(i + 1) % 10 < 3 THEN 'a' ELSE 'b' END AS label, "
                "hash(i + 2) % 4 AS s "
                f"FROM range(31500) AS r(i) ORDER BY {order}"
            )
            rows = connection.execute(f"SELECT g, {call} FROM t GROUP BY g ORDER BY g").fetchall()
            found.append(bits(rows))
            if threads == 1:
                alone = connection.execute(f"SELECT {call} FROM t WHERE g = 7").fetchall()
                assert bits(alone[0][0]) == bits(rows[7][1]), "whatever else is in the batch"
    assert found[0] == found[1] == found[2]


@pytest.mark.parametrize("call", CALLS)
def test_seeds_differ(connection: duckdb.DuckDBPyConnection, call: str) -> None:
    source = (
        "(SELECT (hash(i) % 200) / 8.0 AS x, hash(i + 3) % 50 AS v, hash(i + 2) % 4 AS s, "
        "hash(i + 1) % 10 < 3 AS label FROM range(200) AS r(i))"
    )
    seeded = [call[:-1] + f", seed := {seed})" for seed in (0, 1, 2, 0)]
    query = f"SELECT {', '.join(seeded)} FROM {source}"
    (found,) = connection.execute(query).fetchall()
    assert found[0] == found[3]
    assert len({answer["p_value"] for answer in found}) > 1


def test_each_group_uses_its_own_parameters(connection: duckdb.DuckDBPyConnection) -> None:
    source = (
        "(SELECT i % 3 AS g, (hash(i) % 100)::DOUBLE AS x, i % 7 < 3 AS label "
        "FROM range(120) AS r(i))"
    )
    own = "CASE g WHEN 0 THEN {} WHEN 1 THEN {} ELSE {} END"
    settings_ = {
        "statistic": ("'mean'", "'median'", "'mean'"),
        "alternative": ("'greater'", "'less'", "'two-sided'"),
        "resamples": (100, 200, 300),
        "seed": (1, 2, 3),
    }
    given_ = ", ".join(f"{k} := {own.format(*v)}" for k, v in settings_.items())
    query = f"SELECT permutation_test(x, label, {given_}) FROM {source} GROUP BY g ORDER BY g"
    together = [row[0] for row in connection.execute(query).fetchall()]
    for g in range(3):
        spelt = ", ".join(f"{k} := {v[g]}" for k, v in settings_.items())
        query = f"SELECT permutation_test(x, label, {spelt}) FROM {source} WHERE g = {g}"
        assert bits(connection.execute(query).fetchall()[0][0]) == bits(together[g])


@pytest.mark.parametrize("statistic", ["mean", "median"])
def test_stops_when_asked(statistic: str) -> None:
    """Far more work than the test waits for; the counter moves while it lasts."""
    control = Control()
    with duckdb.connect() as connection:
        register(connection, control=control, threads=2)
        short = (
            f"SELECT permutation_test(i, i % 2, '{statistic}', resamples := 30) FROM range(99) t(i)"
        )
        connection.execute(short).fetchall()  # compiled before the clock runs
        failures: list[BaseException] = []

        def ask_for_long() -> None:
            try:
                connection.execute(
                    f"SELECT permutation_test(hash(i) % 1000, i % 2, '{statistic}', "
                    "resamples := 10000000) FROM range(300000) t(i)"
                ).fetchall()
            except duckdb.Error as failure:
                failures.append(failure)

        asking = threading.Thread(target=ask_for_long)
        asking.start()
        seen = {control.done}
        limit = time.monotonic() + 60
        while len(seen) < 4 and time.monotonic() < limit:
            time.sleep(0.1)
            seen.add(control.done)
        control.stop()
        asking.join(60)
        assert not asking.is_alive() and len(seen) == 4
        assert failures and "stopped" in str(failures[0])
