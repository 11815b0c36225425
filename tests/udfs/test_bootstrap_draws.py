"""Every way of drawing against plain resampling, and the random variates behind them."""

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
import scipy.stats

from midspread.udfs import Control
from midspread.udfs.binding.computing import Work
from midspread.udfs.declaring import Values
from midspread.udfs.grouped import Groups
from midspread.udfs.resampling.draws import Drawn, draw_all
from midspread.udfs.resampling.randomness import stream
from midspread.udfs.resampling.statistics import read_statistic
from midspread.udfs.resampling.variates import binomial, hypergeometric, uniform_rank
from tests.udfs.test_bootstrap import one

Draw = Callable[..., Any]
PLAIN: dict[str, Draw] = {
    "mean": lambda y: y.mean(axis=1),
    "trimmed_mean(0.2)": lambda y: scipy.stats.trim_mean(y, 0.2, axis=1),
    "trimmed_mean(0.02)": lambda y: scipy.stats.trim_mean(y, 0.02, axis=1),
    "winsorized_mean(0.2)": lambda y: winsorized(y, 0.2),
    "median": lambda y: np.median(y, axis=1),
    "quantile_hf(0.95)": lambda y: np.quantile(y, 0.95, axis=1),
    "quantile_hf(0, 1)": lambda y: y.min(axis=1),
    "iqr_scale": lambda y: scipy.stats.iqr(y, axis=1) / 1.3489795003921634,
    "sd": lambda y: y.std(axis=1, ddof=1),
    "winsorized_sd(0.1)": lambda y: clipped(y, 0.1).std(axis=1, ddof=1),
    "trimmed_mean_se(0.2)": lambda y: error_of_trimmed_mean(y, 0.2),
}


PLAIN_AND_MORE: dict[str, Draw] = {
    **PLAIN,
    "trimmed_mean(0.001)": lambda y: scipy.stats.trim_mean(y, 0.001, axis=1),
}


def winsorized(y: Values, share: float) -> Values:
    return clipped(y, share).mean(axis=1)


def clipped(y: Values, share: float) -> Values:
    y = np.sort(y, axis=1)
    g = int(share * y.shape[1])
    return np.clip(y, y[:, g : g + 1], y[:, -g - 1 : y.shape[1] - g])


def error_of_trimmed_mean(y: Values, share: float) -> Values:
    n = y.shape[1]
    kept = n - 2 * int(share * n)
    return clipped(y, share).std(axis=1, ddof=1) * np.sqrt((n - 1) / (kept * (kept - 1)))


@pytest.mark.parametrize("text", PLAIN)
@pytest.mark.parametrize("n", [4, 11, 60, 130, 700, 5000])
def test_distributed_as_plain_resampling(text: str, n: int, generator: np.random.Generator) -> None:
    """Kolmogorov and Smirnov's test on jittered draws (of few values many tie), fixed seeds."""
    x = generator.lognormal(size=n)
    count = 8000 if n < 1000 else 2000
    ours = one(x, text, count)
    plain = np.concatenate(
        [PLAIN[text](x[generator.integers(0, n, (500, n))]) for _ in range(count // 500)]
    )
    jitter = 1e-9 * plain.std() * generator.uniform(size=(2, count))
    assert scipy.stats.ks_2samp(ours + jitter[0], plain + jitter[1]).pvalue > 1e-3
    assert ours.std() == pytest.approx(plain.std(), rel=0.15)
    if count == 8000:
        assert ours.mean() == pytest.approx(plain.mean(), abs=5 * plain.std() / 60)


SHAPES: dict[str, Callable[[Values], Values]] = {
    "skewed": lambda u: np.exp(u),
    "whole numbers": lambda u: np.floor(4 * u),
    "one in a hundred": lambda u: np.where(u < 0.01, 9.0 + u, 0.0),
    "one in a thousand": lambda u: np.where(u < 0.001, 9.0, u),
}


@pytest.mark.parametrize("shape", SHAPES)
@pytest.mark.parametrize("text", ["mean", "trimmed_mean(0.001)", "winsorized_mean(0.2)"])
def test_sums_drawn_as_such(shape: str, text: str, generator: np.random.Generator) -> None:
    """Quantiles of 20,000 resamples of 2,000 values, against plain ones within Monte Carlo error.

    Values that are rare and far out must not be taken for normal sums.
    """
    x = SHAPES[shape](generator.uniform(size=2000))
    ours = one(x, text, 20_000)
    plain = np.concatenate(
        [PLAIN_AND_MORE[text](x[generator.integers(0, 2000, (500, 2000))]) for _ in range(40)]
    )
    probs = np.array([0.005, 0.025, 0.25, 0.5, 0.75, 0.975, 0.995])
    away = (np.quantile(ours, probs) - np.quantile(plain, probs)) / max(plain.std(), 1e-300)
    error = np.sqrt(2 * probs * (1 - probs) / 20_000) / scipy.stats.norm.pdf(
        scipy.stats.norm.ppf(probs)
    )
    step = 0.05 if shape == "one in a hundred" else 0.02
    assert (np.abs(away) < 4 * error + step).all()
    assert ours.std() == pytest.approx(plain.std(), rel=0.03)


@pytest.mark.parametrize(("n", "share"), [(6, 0.2), (40, 0.0), (90, 0.45), (150, 0.2), (700, 0.1)])
def test_standard_errors_of_draws(n: int, share: float, generator: np.random.Generator) -> None:
    """Counted below 100 values, else from the order statistics that bound what is kept."""
    x = np.sort(generator.lognormal(size=n))
    statistic = read_statistic("test", f"trimmed_mean({share})")
    found: list[Drawn] = []
    draw_all(
        Groups(x, np.array([0, n])),
        np.array([0]),
        statistic,
        4000,
        np.zeros(1),
        Work(Control(), 1),
        lambda _, drawn: found.append(drawn),
        with_errors=True,
    )
    g = int(share * n)
    y = np.sort(x[generator.integers(0, n, (4000, n))], axis=1)
    expected = error_of_trimmed_mean(y, share)
    means = y[:, g : n - g].mean(axis=1)
    (drawn,) = found
    jitter = 1e-9 * generator.uniform(size=(2, 4000))
    for ours, plain in ((drawn.errors[0], expected), (drawn.draws[0], means)):
        assert scipy.stats.ks_2samp(ours + jitter[0], plain + jitter[1]).pvalue > 1e-3
    together = np.corrcoef(drawn.draws[0], drawn.errors[0])[0, 1]
    assert together == pytest.approx(np.corrcoef(means, expected)[0, 1], abs=0.08)
    assert (drawn.errors[0] == 0.0).mean() == pytest.approx((expected < 1e-12).mean(), abs=0.01)


@pytest.mark.parametrize(
    ("n", "p"), [(1, 0.5), (9, 0.3), (50, 0.01), (40, 0.5), (60, 0.9), (1000, 0.2), (10**6, 0.37)]
)
def test_binomial(n: int, p: float) -> None:
    drawn = []
    with np.errstate(over="ignore"):
        state = stream(np.uint64(n), 7)
        for _ in range(6000):
            k, state = binomial(state, n, p)
            drawn.append(k)
    assert min(drawn) >= 0 and max(drawn) <= n
    # Cells of about equal chance
    edges = np.unique(scipy.stats.binom.ppf(np.linspace(0.04, 0.96, 24), n, p))
    chances = np.diff(np.concatenate(([0.0], scipy.stats.binom.cdf(edges, n, p), [1.0])))
    cells = np.bincount(np.searchsorted(edges, drawn), minlength=chances.size)
    keep = chances > 1e-12
    assert cells[~keep].sum() == 0
    if keep.sum() > 1:
        assert (
            scipy.stats.chisquare(cells[keep], 6000 * chances[keep] / chances[keep].sum()).pvalue
            > 1e-3
        )


@pytest.mark.parametrize(
    ("members", "size", "drawn"),
    [
        (1, 65, 32),
        (64, 65, 32),
        (30, 65, 32),
        (100, 999, 499),
        (9000, 10_000, 5000),
        (37, 10**7, 5 * 10**6),
    ],
)
def test_hypergeometric(members: int, size: int, drawn: int) -> None:
    found = []
    with np.errstate(over="ignore"):
        state = stream(np.uint64(size), members)
        for _ in range(4000):
            k, state = hypergeometric(state, members, size, drawn)
            found.append(k)
    law = scipy.stats.hypergeom(size, members, drawn)
    edges = np.unique(law.ppf(np.linspace(0.04, 0.96, 24)))
    chances = np.diff(np.concatenate(([0.0], law.cdf(edges), [1.0])))
    cells = np.bincount(np.searchsorted(edges, found), minlength=chances.size)
    keep = chances > 1e-9
    assert cells[~keep].sum() == 0
    assert scipy.stats.chisquare(cells[keep], 4000 * chances[keep] / chances[keep].sum()).pvalue > (
        1e-3
    )


@pytest.mark.parametrize(("k", "n"), [(1, 1), (1, 8), (8, 8), (2, 3), (3, 20), (500, 1000)])
def test_uniform_rank(k: int, n: int) -> None:
    drawn = []
    with np.errstate(over="ignore"):
        state = stream(np.uint64(k), n)
        for _ in range(4000):
            u, state = uniform_rank(state, k, n)
            drawn.append(u)
    assert scipy.stats.kstest(drawn, scipy.stats.beta(k, n - k + 1).cdf).pvalue > 1e-3
