"""Permutation tests: every arrangement by hand, p under the null, levels and limits."""

import itertools
import math
from collections.abc import Callable, Sequence
from typing import Any

import duckdb
import numpy as np
import pytest
import scipy.stats
from hypothesis import given, settings
from hypothesis import strategies as st

from tests.udfs.permutations import NOTHING, TWO_LABELS, ask

Statistic = Callable[[np.ndarray], float]
NUMPY: dict[str, Statistic] = {
    "mean": lambda x: float(np.mean(x)),
    "median": lambda x: float(np.median(x)),
    "trimmed_mean(0.2)": lambda x: float(scipy.stats.trim_mean(x, 0.2)),
}


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
