"""Every way of drawing against plain resampling, and the random variates behind them."""

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
import scipy.stats

from midspread.udfs.declaring import Values
from midspread.udfs.resampling import drawing_loops
from midspread.udfs.resampling.randomness import stream
from midspread.udfs.resampling.variates import binomial, uniform_rank
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
}


def winsorized(y: Values, share: float) -> Values:
    y = np.sort(y, axis=1)
    g = int(share * y.shape[1])
    return np.clip(y, y[:, g : g + 1], y[:, -g - 1 : y.shape[1] - g]).mean(axis=1)


@pytest.mark.parametrize("text", PLAIN)
@pytest.mark.parametrize("n", [4, 11, 60, 700, 1300, 5000])
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


def test_a_cut_that_leaves_its_window(
    monkeypatch: pytest.MonkeyPatch, generator: np.random.Generator
) -> None:
    """With windows far too narrow all zones are counted, and the distribution stays what it is.

    Run uncompiled, where the constants can be changed.
    """
    monkeypatch.setattr(drawing_loops, "_COUNTED", 10)
    monkeypatch.setattr(drawing_loops, "_REACH", 0.0)
    monkeypatch.setattr(drawing_loops, "_WORTH_SUMMING", 4)
    n, count = 120, 1500
    x = np.sort(generator.lognormal(size=n))
    trimmed, errors = np.empty((1, count)), np.empty((1, count))
    rows = np.array([0])
    left = []
    original = drawing_loops._kept_draws

    def noted(v: Values, *arguments: Any) -> Any:
        left.append(v.size == n)
        return original(v, *arguments)

    monkeypatch.setattr(drawing_loops, "_kept_draws", noted)
    with np.errstate(over="ignore"):
        drawing_loops.of_middles(
            x,
            np.array([0]),
            np.array([n]),
            rows,
            np.array([12345], dtype=np.uint64),
            np.array([0.2]),
            0,
            count,
            count,
            trimmed,
            np.zeros(2, dtype=np.int64),
            False,
            np.array([scipy.stats.trim_mean(x, 0.2)]),
            errors,
        )
    assert 0.02 < np.mean(left) < 0.98, "both branches are met"
    y = x[generator.integers(0, n, (count, n))]
    assert scipy.stats.ks_2samp(trimmed[0], PLAIN["trimmed_mean(0.2)"](y)).pvalue > 1e-3
    g = int(0.2 * n)
    y.sort(axis=1)
    clipped = np.clip(y, y[:, g : g + 1], y[:, -g - 1 : n - g])
    expected = clipped.std(axis=1, ddof=1) / (0.6 * np.sqrt(n))
    assert errors[0].mean() == pytest.approx(expected.mean(), rel=0.03)
    assert scipy.stats.ks_2samp(errors[0], expected).pvalue > 1e-3


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


@pytest.mark.parametrize(("k", "n"), [(1, 1), (1, 8), (8, 8), (2, 3), (3, 20), (500, 1000)])
def test_uniform_rank(k: int, n: int) -> None:
    drawn = []
    with np.errstate(over="ignore"):
        state = stream(np.uint64(k), n)
        for _ in range(4000):
            u, state = uniform_rank(state, k, n)
            drawn.append(u)
    assert scipy.stats.kstest(drawn, scipy.stats.beta(k, n - k + 1).cdf).pvalue > 1e-3
