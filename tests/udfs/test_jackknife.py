"""The jackknife: leave-one-out values in closed form and interpolated against one by one."""

import math

import duckdb
import numpy as np
import pytest

from midspread.udfs import Control
from midspread.udfs.binding.computing import Work
from midspread.udfs.grouped import Groups
from midspread.udfs.resampling.left_out_figures import left_out_figures
from midspread.udfs.resampling.samples import samples_of
from midspread.udfs.resampling.statistics import read_statistic
from tests.conftest import Estimate


def figures(x: np.ndarray, text: str, exact: int) -> np.ndarray:
    statistic = read_statistic("test", text)
    samples = samples_of(Groups(x, np.array([0, x.size])), np.array([0]), statistic)
    return left_out_figures(statistic, samples, exact, 1, 1, Work(Control(), 1))[0]


def one_by_one(estimate: Estimate, x: np.ndarray, name: str, **parameters: float) -> np.ndarray:
    left = np.array([estimate(name, np.delete(x, i), **parameters) for i in range(x.size)])
    d = left.mean() - left
    squares = (d**2).sum()
    return np.array(
        [
            left.mean() - estimate(name, x, **parameters),
            squares,
            (d**3).sum() / (6 * squares**1.5) if squares > 0 else 0.0,
        ]
    )


@pytest.mark.parametrize("share", [0.0, 0.1, 0.29, 0.45, 0.499, 0.5])
@pytest.mark.parametrize("name", ["trimmed_mean", "winsorized_mean"])
@pytest.mark.parametrize("n", [2, 3, 4, 10, 11, 30])
def test_middles_in_closed_form(
    estimate: Estimate, generator: np.random.Generator, name: str, share: float, n: int
) -> None:
    x = np.sort(generator.integers(0, 400, n) / 8.0)
    expected = one_by_one(estimate, x, name, share=share)
    assert figures(x, f"{name}({share})", 400) == pytest.approx(expected, rel=1e-8, abs=1e-10)


@pytest.mark.parametrize(
    "text", ["trimean", "iqr_scale", "quantile_hf(0.9)", "quantile_hf(0.3, 2)"]
)
@pytest.mark.parametrize("n", [5, 8, 21])
def test_few_ranks_as_one_by_one(
    estimate: Estimate, generator: np.random.Generator, text: str, n: int
) -> None:
    x = np.sort(generator.integers(0, 4000, n) / 8.0)
    statistic = read_statistic("test", text)
    given = {
        p.name: v for p, v in zip(statistic.function.parameters, statistic.parameters, strict=True)
    }
    expected = one_by_one(estimate, x, statistic.function.name, **given)
    assert figures(x, text, 400) == pytest.approx(expected, rel=1e-8, abs=1e-10)


@pytest.mark.parametrize("text", ["sd", "gini_mean_difference", "harrell_davis", "huber_location"])
def test_interpolated_close_to_exact(generator: np.random.Generator, text: str) -> None:
    """400 of 1,500 values left out: se to 1 %, acceleration to 0.0005, with one wild value."""
    for x in (generator.normal(size=1500), generator.lognormal(size=1500)):
        x = np.sort(np.append(x, 40.0))
        exact, some = figures(x, text, 10_000), figures(x, text, 400)
        assert math.sqrt(some[1]) == pytest.approx(math.sqrt(exact[1]), rel=0.01)
        assert some[2] == pytest.approx(exact[2], abs=5e-4)


def test_too_few_and_nothing_to_leave_out(connection: duckdb.DuckDBPyConnection) -> None:
    rows = connection.execute(
        "SELECT g, jackknife(x, 'sd'), jackknife(x, 'mean') FROM (VALUES (0, NULL), "
        "(1, 3.0::DOUBLE), (2, 1.0), (2, 3.0), (3, 4.0), (3, 'nan')) t(g, x) GROUP BY g ORDER BY g"
    ).fetchall()
    assert rows[0][1:] == rows[1][1:] == (None, None)
    assert rows[2][1] == {"estimate": math.sqrt(2.0), "bias": None, "se": None, "n": 2}
    assert rows[2][2] == {"estimate": 2.0, "bias": 0.0, "se": 1.0, "n": 2}
    assert all(math.isnan(rows[3][2][name]) for name in ("estimate", "bias", "se"))


def test_equal_values(connection: duckdb.DuckDBPyConnection) -> None:
    for text in ("mean", "trimmed_mean(0.2)", "median", "sd", "qn_scale"):
        ((found,),) = connection.execute(
            f"SELECT jackknife(0.1, '{text}') FROM range(30)"
        ).fetchall()
        assert (found["bias"], found["se"]) == (0.0, 0.0), text


def test_pairs(connection: duckdb.DuckDBPyConnection) -> None:
    """Of many pairs some are left out; the error is then an estimate itself."""
    query = "SELECT jackknife_yx(i + hash(i) % {noise}, i) AS all_of_them FROM range({n}) t(i)"
    ((exact,),) = connection.execute(query.format(n=1000, noise=900)).fetchall()
    ((some,),) = connection.execute(query.format(n=3000, noise=2700)).fetchall()
    assert some["se"] * math.sqrt(3000) == pytest.approx(exact["se"] * math.sqrt(1000), rel=0.2)
    assert exact["n"] == 1000 and some["n"] == 3000
