"""Every declaration is complete, true where that can be checked, and cheap to look up."""

import inspect
import itertools
import re
import subprocess
import sys
from collections.abc import Iterator
from typing import get_args

import duckdb
import numpy as np
import pytest

from midspread.udfs import Function, functions, register
from midspread.udfs.declaring import Family
from tests.udfs.calling import AGGREGATES, NAMES, answers, call, figures, value_for

EVERY = tuple(functions().values())
each_entry = pytest.mark.parametrize("function", EVERY, ids=[f.name for f in EVERY])
each_function = pytest.mark.parametrize("function", AGGREGATES, ids=NAMES)

_INTERVAL = {
    "statistic": "'trimmed_mean(0.2)'",
    "confidence": 0.95,
    "method": "'bca'",
    "resamples": 2000,
    "seed": 0,
}
DEFINED = {
    # name: parameters with their defaults, as the definitions give them
    "trimmed_mean": {"share": 0.2},
    "winsorized_mean": {"share": 0.2},
    "trimean": {},
    "huber_location": {"k": 1.345},
    "bisquare_location": {"c": 4.685},
    "hodges_lehmann": {},
    "half_sample_mode": {},
    "harrell_davis": {"prob": 0.5},
    "quantile_hf": {"prob": None, "kind": 7},
    "weighted_median": {},
    "weighted_trimmed_mean": {"share": 0.2},
    "mad_scale": {},
    "iqr_scale": {},
    "qn_scale": {},
    "sn_scale": {},
    "gini_mean_difference": {},
    "winsorized_sd": {"share": 0.2},
    "trimmed_mean_se": {"share": 0.2},
    "bisquare_scale": {"c": 9},
    "bowley_skew": {},
    "octile_skew": {},
    "medcouple": {},
    "moors_kurtosis": {},
    "l_moments": {},
    "letter_values": {},
    "fences": {"k": 1.5},
    "adjusted_fences": {},
    "spearman": {},
    "kendall_tau": {},
    "theil_sen": {"confidence": 0.95},
    "repeated_median": {},
    "resistant_line": {},
    "winsorized_corr": {"share": 0.2},
    "percentage_bend_corr": {"share": 0.2},
    "bisquare_corr": {},
    "rung": {"power": None},
    "box_cox": {"power": None},
    "box_cox_back": {"power": None},
    "yeo_johnson": {"power": None},
    "yeo_johnson_back": {"power": None},
    "folded_power": {"power": None},
    "started_log": {"start": None},
    "normal_score": {},
    "box_cox_power": {},
    "yeo_johnson_power": {},
    "symmetry_power": {},
    "bootstrap_interval": _INTERVAL,
    "bootstrap_interval_yx": {**_INTERVAL, "statistic": "'spearman'"},
    "jackknife": {"statistic": "'trimmed_mean(0.2)'"},
    "jackknife_yx": {"statistic": "'spearman'"},
}
_POWER_FIELDS = ("power", "lower", "upper", "log_likelihood")
FIELDS = {
    "l_moments": ("l1", "l2", "t3", "t4"),
    "letter_values": ("letter", "depth", "lower", "mid", "upper", "spread"),
    "fences": ("lower", "upper"),
    "adjusted_fences": ("lower", "upper"),
    "theil_sen": ("slope", "intercept", "lower", "upper"),
    "repeated_median": ("slope", "intercept"),
    "resistant_line": ("slope", "intercept", "half_slope_ratio"),
    "box_cox_power": _POWER_FIELDS,
    "yeo_johnson_power": _POWER_FIELDS,
    **dict.fromkeys(
        ("bootstrap_interval", "bootstrap_interval_yx"),
        ("estimate", "lower", "upper", "se", "bias", "n", "resamples"),
    ),
    **dict.fromkeys(("jackknife", "jackknife_yx"), ("estimate", "bias", "se", "n")),
}
COLUMNS = {
    "box_cox_back": ("v",),
    "yeo_johnson_back": ("v",),
    "folded_power": ("f",),
    "normal_score": ("rank", "n"),
    "bootstrap_interval_yx": ("y", "x"),
    "jackknife_yx": ("y", "x"),
}


@pytest.mark.parametrize("name", DEFINED)
def test_declared_as_defined(name: str) -> None:
    function = functions()[name]
    assert {p.name: p.default for p in function.parameters} == DEFINED[name]
    assert list(DEFINED[name]) == [p.name for p in function.parameters]
    assert function.fields == FIELDS.get(name, ())
    usual = {"weighted": ("x", "w"), "association": ("y", "x")}.get(function.family, ("x",))
    assert function.columns == COLUMNS.get(name, usual)


@each_entry
def test_nothing_is_left_out(function: Function) -> None:
    assert function.family in get_args(Family)
    for text in (function.formula, function.source, function.breakdown, function.cost):
        assert text and text == text.strip()
    assert re.search(r"\b(1[89]|20)\d\d\b", function.source), "a source has a year"
    assert function.version >= 1
    assert function.signature.startswith(f"{function.name}(")
    for parameter in function.parameters:
        assert parameter.meaning and not parameter.meaning.endswith(".")
        if isinstance(parameter.default, float | int) and not isinstance(parameter.default, bool):
            parameter.check(function.name, np.array([float(parameter.default)]), np.array([False]))


@each_entry
def test_described_in_numpydoc(function: Function) -> None:
    assert function.meaning.endswith(".") and len(function.meaning) <= 100
    lines = function.description.split("\n")
    titles = [above for above, below in itertools.pairwise(lines) if set(below) == {"-"}]
    assert "Parameters" in titles
    known = ["Parameters", "Returns", "Raises", "Notes", "References", "Examples"]
    assert titles == [title for title in known if title in titles]
    section = function.description.split("Parameters\n")[1].split("\n\n")[0]
    for name in (*function.columns, *(p.name for p in function.parameters)):
        assert re.search(rf"^(\w+, )*{name}(, \w+)* : ", section, re.MULTILINE), name


@each_function
def test_named_as_its_kernel(function: Function) -> None:
    assert function.kernel is not None
    assert function.kernel.__name__ == function.name
    taken = list(inspect.signature(function.kernel).parameters)
    own = [*function.columns, *(parameter.name for parameter in function.parameters)]
    own += ["out"] if function.fields else []
    assert taken == own + (["control"] if function.watches else [])
    assert inspect.getmodule(function.kernel).__name__.startswith("midspread.udfs.")  # type: ignore[union-attr]


@each_function
def test_smallest_n_is_the_smallest(
    connection: duckdb.DuckDBPyConnection, function: Function
) -> None:
    n = function.smallest_n
    assert n >= 1
    below, enough = answers(connection, function, [[1.0, 2.0, 4.0][: n - 1], [1.0, 2.0, 4.0][:n]])
    assert below is None
    assert any(number is not None for _, number in figures(function, enough))


@pytest.fixture(scope="module")
def visits() -> Iterator[duckdb.DuckDBPyConnection]:
    """The table that the examples ask."""
    with duckdb.connect() as connection:
        register(connection)
        connection.execute(
            "CREATE TABLE visits AS SELECT i AS visit, 'route ' || i % 3 AS route, "
            "(hash(i) % 900) / 10.0 AS dwell_s, i % 40 AS boardings, "
            "i % 7 AS vehicle, if(i % 2 = 0, 'cash box', 'tap reader') AS payment "
            "FROM range(500) AS t(i)"
        )
        yield connection


@each_entry
def test_the_example_runs(visits: duckdb.DuckDBPyConnection, function: Function) -> None:
    assert function.name in function.example
    if function.kind == "table":
        rows = visits.execute(function.example).fetchall()
    else:
        rows = visits.execute(f"SELECT {function.example} FROM visits").fetchall()
    assert any(row[-1] is not None for row in rows) or function.kind == "table"


MOVED = ("location", "weighted", "scale")
"""Families whose figures wild values carry off as far as they like."""


def breakdown_point(function: Function) -> float | None:
    """The declared breakdown point as a number, at the settings used here."""
    said = function.breakdown
    if said.startswith("share"):
        return next(value_for(p) for p in function.parameters if p.name == "share")
    if said == "min(prob, 1 - prob)":
        return 0.3
    number = re.match(r"([\d.]+)( %)?", said)
    if number is None or said.startswith("0 in theory"):
        return None
    return float(number[1]) / (100 if number[2] else 1)


@pytest.mark.parametrize(
    "name", [f.name for f in AGGREGATES if f.family in MOVED and breakdown_point(f) is not None]
)
def test_breakdown_point(
    connection: duckdb.DuckDBPyConnection, name: str, generator: np.random.Generator
) -> None:
    """Just under it wild values leave the estimate bounded; just over, they carry it off."""
    function = functions()[name]
    point = breakdown_point(function)
    assert point is not None
    clean = generator.normal(50.0, 10.0, 400).round(3)
    # Equal, so that a mode can move there; for a scale apart, so that it does not shrink to 0.
    # Below, for the quantile with prob 0.3 is nearer to that end.
    wild = -1e12 * (np.arange(1.0, 401.0) if function.family == "scale" else np.ones(400))
    for share, carried_off in ((point - 0.015, False), (point + 0.015, True)):
        count = max(round(share * clean.size), 0)
        values = [*wild[:count], *clean[count:]]
        answer = answers(connection, function, [values])[0]
        assert (abs(answer) > 1e6) == carried_off, (share, answer)


def test_looking_up_is_cheap() -> None:
    """The catalogue loads none of the large libraries, so that a kept answer comes at once."""
    code = (
        "import sys, midspread.udfs as u; names = list(u.functions()); u.ParameterError; "
        "heavy = ('numba', 'llvmlite', 'scipy', 'pandas', 'duckdb', 'pyarrow', 'sqlglot'); "
        "print(len(names), *(name for name in heavy if name in sys.modules))"
    )
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True, timeout=60
    )
    assert done.stdout.split() == [str(len(functions()))]


def test_registering_compiles_nothing() -> None:
    code = (
        "import sys, duckdb, midspread.udfs as u; connection = duckdb.connect(); "
        "u.register(connection); "
        "print(*(name for name in ('numba', 'scipy', 'pandas') if name in sys.modules))"
    )
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True, timeout=60
    )
    assert done.stdout.split() == []


@each_function
def test_calls_with_the_defaults(connection: duckdb.DuckDBPyConnection, function: Function) -> None:
    """What the signature shows is what a call without parameters takes."""
    source = "(VALUES (1.0, 1.0), (2.0, 1.0), (4.0, 2.0), (9.0, 1.0), (30.0, 1.0)) AS t(x, w)"
    source = f"(SELECT x, w, (5 * x) % 3 AS v FROM {source})"
    given = {p.name: p.default for p in function.parameters if p.default is not None}
    short, spelt = call(function), call(function, **given)
    rows = connection.execute(f"SELECT {short}, {spelt} FROM {source}").fetchall()
    assert rows[0][0] == rows[0][1]
