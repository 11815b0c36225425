"""The functions over pairs of values against all pairs written out, and their invariances."""

import itertools
import math
from collections.abc import Callable, Sequence
from fractions import Fraction
from typing import Any, Final

import duckdb
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from midspread.udfs import functions
from tests.udfs.calling import answers

Connection = duckdb.DuckDBPyConnection
Group = Sequence[float]

ALL: Final = ("hodges_lehmann", "qn_scale", "sn_scale", "gini_mean_difference", "medcouple")
SCALES: Final = ("qn_scale", "sn_scale", "gini_mean_difference")

# Corrections for small samples, typed in from R's robustbase 0.95-0 (print(Qn), print(Sn)).
QN_2_TO_12: Final = (
    *(0.399356, 0.99365, 0.51321, 0.84401, 0.6122, 0.85877),
    *(0.66993, 0.87344, 0.72014, 0.88906, 0.75743),
)
SN_2_TO_9: Final = (0.743, 1.851, 0.954, 1.351, 0.993, 1.198, 1.005, 1.131)


def distance(a: float, b: float) -> float:
    return 0.0 if a == b else abs(a - b)


def hodges_lehmann(x: Group) -> float:
    pairs = itertools.combinations_with_replacement(x, 2)
    means = sorted(a / 2 + b / 2 for a, b in pairs if not (math.isinf(a) and a == -b))
    low, high = means[(len(means) - 1) // 2], means[len(means) // 2]
    return low if low == high else (low + high) / 2


def qn_scale(x: Group) -> float:
    n = len(x)
    h = n // 2 + 1
    differences = sorted(distance(a, b) for a, b in itertools.combinations(x, 2))
    scale = 2.21914 * differences[h * (h - 1) // 2 - 1]
    if n <= 12:
        return scale * QN_2_TO_12[n - 2]
    if n % 2 == 1:
        return scale / (1 + (1.60188 + (-2.1284 - 5.172 / n) / n) / n)
    return scale / (1 + (3.67561 + (1.9654 + (6.987 - 77 / n) / n) / n) / n)


def sn_scale(x: Group) -> float:
    n = len(x)
    high_medians = sorted(sorted(distance(a, b) for b in x)[n // 2] for a in x)
    scale = 1.1926 * high_medians[(n + 1) // 2 - 1]
    if n <= 9:
        return scale * SN_2_TO_9[n - 2]
    return scale * n / (n - 0.9) if n % 2 == 1 else scale


def gini_mean_difference(x: Group) -> float:
    pairs = [distance(a, b) for a, b in itertools.combinations(x, 2)]
    return math.fsum(pairs) / len(pairs)


def medcouple(x: Group) -> float:
    """In exact fractions for finite values; the tie kernel by its own definition."""
    ordered = sorted(x)
    n = len(ordered)
    middles = {ordered[(n - 1) // 2], ordered[n // 2]}
    if any(map(math.isinf, middles)):
        pytest.skip("the median is infinite")
    centre = sum(map(Fraction, (ordered[(n - 1) // 2], ordered[n // 2]))) / 2
    lower = [v for v in ordered if v <= centre][::-1]  # from the median downwards
    upper = [v for v in ordered if v >= centre]
    ties = sum(v == centre for v in ordered)
    kernels: list[Fraction] = []
    for i, high in enumerate(upper):
        for j, low in enumerate(lower):
            if high == low:
                kernels.append(Fraction((i + j > ties - 1) - (i + j < ties - 1)))
            elif math.isinf(high) or math.isinf(low):
                kernels.append(Fraction(math.isinf(high) - math.isinf(low)))
            else:
                top = (Fraction(high) - centre) - (centre - Fraction(low))
                kernels.append(top / (Fraction(high) - Fraction(low)))
    kernels.sort()
    return float((kernels[(len(kernels) - 1) // 2] + kernels[len(kernels) // 2]) / 2)


BY_DEFINITION: Final[dict[str, Callable[[Group], float]]] = {
    "hodges_lehmann": hodges_lehmann,
    "qn_scale": qn_scale,
    "sn_scale": sn_scale,
    "gini_mean_difference": gini_mean_difference,
    "medcouple": medcouple,
}


def ask(connection: Connection, name: str, groups: Sequence[Group]) -> list[Any]:
    return answers(connection, functions()[name], groups)


def as_defined(connection: Connection, name: str, groups: Sequence[Group]) -> None:
    for group, answer in zip(groups, ask(connection, name, groups), strict=True):
        expected = BY_DEFINITION[name](group)
        assert answer == pytest.approx(expected, rel=1e-14, abs=1e-15, nan_ok=True), group


few_values = st.lists(st.integers(0, 3).map(float), min_size=2, max_size=14)
small_integers = st.lists(st.integers(-20, 60).map(float), min_size=2, max_size=60)
rounded_to_5 = st.lists(st.integers(0, 9).map(lambda v: 5.0 * v), min_size=20, max_size=60)
tenths = st.lists(st.integers(-99, 99).map(lambda v: v / 8), min_size=2, max_size=60)
any_float = st.lists(st.floats(-1e6, 1e6, allow_subnormal=False), min_size=2, max_size=40)
infinite = st.lists(
    st.sampled_from([-math.inf, 0.0, 1.0, 2.5, 7.0, math.inf]), min_size=2, max_size=9
)
GROUPS: Final = st.lists(
    st.one_of(few_values, small_integers, rounded_to_5, tenths), min_size=1, max_size=12
)


@pytest.mark.parametrize("name", ALL)
@settings(max_examples=40, deadline=None)
@given(groups=GROUPS)
def test_as_all_pairs_written_out(connection: Connection, name: str, groups: list[Group]) -> None:
    as_defined(connection, name, groups)


@pytest.mark.parametrize("name", ["hodges_lehmann", *SCALES])
@settings(max_examples=30, deadline=None)
@given(groups=st.lists(any_float, min_size=1, max_size=5))
def test_as_all_pairs_of_any_floats(connection: Connection, name: str, groups: list[Group]) -> None:
    as_defined(connection, name, groups)


def test_medcouple_of_continuous_values(
    connection: Connection, generator: np.random.Generator
) -> None:
    groups = [generator.lognormal(3, 1, n).tolist() for n in (2, 3, 4, 7, 30, 61, 150)]
    for group, answer in zip(groups, ask(connection, "medcouple", groups), strict=True):
        # The median of an even number is rounded, which the nearest kernels magnify a little.
        assert answer == pytest.approx(medcouple(group), abs=1e-12)


@pytest.mark.parametrize("name", ["hodges_lehmann", "qn_scale", "sn_scale"])
@settings(max_examples=40, deadline=None)
@given(groups=st.lists(infinite, min_size=1, max_size=12))
def test_infinite_values(connection: Connection, name: str, groups: list[Group]) -> None:
    as_defined(connection, name, groups)


@settings(max_examples=40, deadline=None)
@given(groups=st.lists(infinite, min_size=1, max_size=12))
def test_medcouple_of_infinite_values(connection: Connection, groups: list[Group]) -> None:
    as_defined(
        connection, "medcouple", [g for g in groups if math.isfinite(_middle(g))] or [[1, 2]]
    )


def _middle(group: Group) -> float:
    ordered = sorted(group)
    n = len(ordered)
    return abs(ordered[(n - 1) // 2]) + abs(ordered[n // 2])


def test_infinite_values_in_words(connection: Connection) -> None:
    inf = math.inf
    assert ask(connection, "hodges_lehmann", [[-inf, 1, 2, 3, inf]]) == [2.0]
    assert ask(connection, "medcouple", [[-inf, 1, 2, 3, inf], [1, 2, 3, 4, inf]]) == [0.0, 0.0]
    # R 4.2.2, robustbase 0.95-0: mc(c(1, 2, 3, 4, Inf), doReflect = TRUE) is 0 as well.
    assert ask(connection, "qn_scale", [[inf] * 5, [-inf, -inf, inf, inf, inf]]) == [0.0, 0.0]
    assert ask(connection, "sn_scale", [[inf] * 5, [1, 2, inf]]) == [0.0, pytest.approx(2.207503)]
    assert ask(connection, "gini_mean_difference", [[inf] * 3, [1, inf]]) == [0.0, inf]
    assert all(map(math.isnan, ask(connection, "hodges_lehmann", [[-inf, inf]])))


@pytest.mark.parametrize("name", ALL)
def test_shift_and_unit(connection: Connection, name: str, generator: np.random.Generator) -> None:
    """In steps of 1/64, so that the shifted values are the values plus 1e9 to the last bit."""
    sizes = (2, 3, 5, 8, 13, 50, 400)
    groups = [(np.round(generator.lognormal(3, 0.6, n) * 64) / 64).tolist() for n in sizes]
    plain = ask(connection, name, groups)
    shifted = ask(connection, name, [[v + 1e9 for v in group] for group in groups])
    mirrored = ask(connection, name, [[-v for v in group] for group in groups])
    larger = ask(connection, name, [[v * 1024 for v in group] for group in groups])
    if name == "hodges_lehmann":
        assert [v - 1e9 for v in shifted] == plain
        assert [-v for v in mirrored] == plain
        assert larger == [v * 1024 for v in plain]
    elif name == "medcouple":
        assert shifted == plain
        assert [-v for v in mirrored] == plain
        assert larger == plain
    else:
        assert shifted == pytest.approx(plain, rel=1e-15)
        assert mirrored == plain
        assert larger == [v * 1024 for v in plain]


@pytest.mark.parametrize("name", ALL)
def test_equal_values(connection: Connection, name: str) -> None:
    expected = 4.25 if name == "hodges_lehmann" else 0.0
    groups = [[4.25] * n for n in (2, 3, 9, 50, 5000)]
    assert ask(connection, name, groups) == [expected] * len(groups)


def test_too_few_values(connection: Connection) -> None:
    assert ask(connection, "hodges_lehmann", [[], [3.5]]) == [None, 3.5]
    assert ask(connection, "medcouple", [[], [3.5], [1.0, 9.0]]) == [None, 0.0, 0.0]
    for name in SCALES:
        assert ask(connection, name, [[], [3.5]]) == [None, None]


@pytest.mark.parametrize("name", SCALES)
def test_more_than_half_equal(connection: Connection, name: str) -> None:
    groups = [[7.0] * 26 + [8.0 + i for i in range(24)]]
    (answer,) = ask(connection, name, groups)
    assert answer > 0 if name == "gini_mean_difference" else answer == 0


def test_medcouple_where_one_value_differs(connection: Connection) -> None:
    """Half of the kernels are 1 and as many 0 or −1, so the two middle ones are 0 and 1.

    statsmodels 0.15.0's medcouple(use_fast=False) gives the same; robustbase gives 1.
    """
    assert ask(connection, "medcouple", [[0, 0, 1], [0] * 9 + [1], [-1] + [0] * 9]) == [
        0.5,
        0.5,
        -0.5,
    ]


def test_huge_and_tiny_values(connection: Connection) -> None:
    huge = [1.7e308, 1.6e308, 1.75e308, -1.0e308]
    assert ask(connection, "hodges_lehmann", [huge]) == [pytest.approx(1.625e308, rel=1e-15)]
    wide = [-0.5e308, 0.1e308, 0.6e308]
    assert ask(connection, "gini_mean_difference", [wide]) == [pytest.approx(1.1e308 / 1.5)]
    assert ask(connection, "qn_scale", [wide]) == [pytest.approx(qn_scale(wide))]
    assert ask(connection, "medcouple", [[-1.7e308, -1.6e308, 0.0, 1.6e308, 1.7e308]]) == [0.0]
    powers = [1.0, 2.0, 4.0, 8.0, 16.0, 32.0, 64.0]
    tiny = [v * 5e-324 for v in powers]
    expected = hodges_lehmann(powers) * 5e-324
    assert ask(connection, "hodges_lehmann", [tiny]) == [pytest.approx(expected, abs=5e-324)]
    assert ask(connection, "medcouple", [tiny]) == ask(connection, "medcouple", [powers])


@pytest.mark.parametrize("n", [1500, 2001])
@pytest.mark.parametrize("step", [0.0, 0.1, 5.0])
def test_groups_that_take_several_rounds(
    connection: Connection, generator: np.random.Generator, n: int, step: float
) -> None:
    """All pairs in numpy, of skewed values, of long tails and of two clumps far apart."""
    groups = [generator.lognormal(3, 0.6, n), generator.standard_cauchy(n) * 10]
    groups.append(np.where(np.arange(n) < n // 2, generator.normal(0, 9, n), 1e6))
    for group in groups:
        x = np.sort(np.round(group / step) * step if step else group)
        i, j = np.triu_indices(n)
        pairs = x[i] + x[j]
        middle = (pairs.size - 1) // 2, pairs.size // 2
        means = np.partition(pairs, middle)[[*middle]] / 2
        assert ask(connection, "hodges_lehmann", [x.tolist()]) == [means.sum() / 2]
        apart = (x[j] - x[i])[i < j]
        k = math.comb(n // 2 + 1, 2) - 1
        excess = (
            1.60188 + (-2.1284 - 5.172 / n) / n
            if n % 2
            else 3.67561 + (1.9654 + (6.987 - 77 / n) / n) / n
        )
        qn = 2.21914 * np.partition(apart, k)[k] / (1 + excess / n)
        assert ask(connection, "qn_scale", [x.tolist()]) == [pytest.approx(qn, rel=1e-15)]


def test_a_large_group_in_linear_memory(connection: Connection) -> None:
    """0 … n − 1 with n = 200,001: twenty thousand million pairs, and closed forms to compare."""
    n = 200_001
    values = [float(i) for i in range(n)]
    # n − d pairs lie d apart; Qn wants the first d that has k of them up to it.
    k = math.comb(n // 2 + 1, 2)
    d = next(d for d in range(1, n) if d * n - d * (d + 1) // 2 >= k)
    assert ask(connection, "hodges_lehmann", [values]) == [(n - 1) / 2]
    assert ask(connection, "qn_scale", [values]) == [pytest.approx(2.21914 * d, rel=1e-4)]
    # From the middle half of the values the farther end of the nearest half lies n/4 away, from
    # the outer ones more, so that the low median is the distance from the quarter points.
    assert ask(connection, "sn_scale", [values]) == [pytest.approx(1.1926 * n / 4, rel=1e-4)]
    assert ask(connection, "gini_mean_difference", [values]) == [
        pytest.approx((n + 1) / 3, rel=1e-15)
    ]
    assert ask(connection, "medcouple", [values]) == [0.0]
