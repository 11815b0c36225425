"""What every aggregate promises about NULL, NaN, infinities, tiny groups, ties and row order."""

import math

import duckdb
import numpy as np
import pytest

from midspread.udfs import Function
from tests.udfs.calling import AGGREGATES, NAMES, Group, answers, bits, call, figures, rows

each_function = pytest.mark.parametrize("function", AGGREGATES, ids=NAMES)

SKEWED = (np.round(np.random.default_rng(7).lognormal(3.0, 0.8, 41) * 8) / 8).tolist()
"""Forty-one values in eighths, so that sums and differences are exact."""

RESISTANT = {
    # Functions whose definition cuts or bounds the influence of two wild values in forty-one.
    *("trimmed_mean", "winsorized_mean", "trimean", "huber_location", "bisquare_location"),
    *("hodges_lehmann", "half_sample_mode", "quantile_hf", "weighted_median"),
    *("weighted_trimmed_mean", "mad_scale", "iqr_scale", "qn_scale", "sn_scale"),
    *("winsorized_sd", "trimmed_mean_se", "bisquare_scale", "bowley_skew", "octile_skew"),
    *("moors_kurtosis", "medcouple", "fences", "adjusted_fences"),
}


def with_gaps(group: Group) -> Group:
    """The same values with NULL before, between and after them."""
    return [None, *(v for x in group for v in (x, None))]


@each_function
def test_null_is_skipped(connection: duckdb.DuckDBPyConnection, function: Function) -> None:
    groups = [SKEWED, SKEWED[:5], SKEWED[:1]]
    gapped = answers(connection, function, [with_gaps(group) for group in groups])
    assert bits(gapped) == bits(answers(connection, function, groups))


@pytest.mark.parametrize("name", [f.name for f in AGGREGATES if len(f.columns) > 1])
def test_a_row_without_its_second_value_is_skipped(
    connection: duckdb.DuckDBPyConnection, name: str
) -> None:
    function = AGGREGATES[NAMES.index(name)]
    x = [3.0, 1.0, 8.0, None, 5.0]
    w = [1.0, 2.0, None, 4.0, 2.5]
    kept = answers(connection, function, [[3.0, 1.0, 5.0]], [[1.0, 2.0, 2.5]])
    assert bits(answers(connection, function, [x], [w])) == bits(kept)


@each_function
def test_nan_makes_the_result_nan(
    connection: duckdb.DuckDBPyConnection, function: Function
) -> None:
    spoilt = [*SKEWED[:20], math.nan, *SKEWED[20:]]
    answer, untouched = answers(connection, function, [spoilt, SKEWED])
    numbers = [number for _, number in figures(function, answer)]
    assert numbers and all(number is not None and math.isnan(number) for number in numbers)
    assert bits([untouched]) == bits(answers(connection, function, [SKEWED]))
    if len(function.columns) > 1:
        seconds = [1.0] * 40 + [math.nan]
        answer = answers(connection, function, [SKEWED], [seconds])[0]
        assert all(
            number is not None and math.isnan(number) for _, number in figures(function, answer)
        )


@each_function
def test_too_few_values_give_null_beside_other_groups(
    connection: duckdb.DuckDBPyConnection, function: Function
) -> None:
    """One small group must not stop a query over many."""
    tiny = [[], [4.0], [4.0, 7.0], [4.0, 7.0, 7.5], [None], [None, 4.0]]
    found = answers(connection, function, [SKEWED, *tiny, SKEWED])
    assert bits([found[0]]) == bits([found[-1]]) == bits(answers(connection, function, [SKEWED]))
    for group, answer in zip(tiny, found[1:-1], strict=True):
        n = sum(x is not None for x in group)
        if n < function.smallest_n:
            assert answer is None
        else:
            assert answer is not None or n < 4, "NULL only where the definition divides by 0"


@each_function
def test_no_rows_at_all(connection: duckdb.DuckDBPyConnection, function: Function) -> None:
    source = "(SELECT 1.5::DOUBLE AS x, 1.0::DOUBLE AS w, 2.0::DOUBLE AS v WHERE false)"
    assert connection.execute(f"SELECT {call(function)} FROM {source}").fetchall() == [(None,)]
    grouped = connection.execute(f"SELECT x, {call(function)} FROM {source} GROUP BY x").fetchall()
    assert grouped == []


@each_function
def test_equal_values(connection: duckdb.DuckDBPyConnection, function: Function) -> None:
    """Location is that value to the bit, scale 0 or NULL, shape 0 or NULL."""
    for value in (0.1, 0.0, -7.3, 1e300, 5e-324, 1e9 + 0.1):
        groups = [[value] * n for n in (2, 3, 4, 7, 10, 41, 100, 1000)]
        for answer in answers(connection, function, groups):
            for family, number in figures(function, answer):
                if family == "location":
                    assert number == value
                elif family == "scale" or not function.fields:
                    assert number in (0.0, None)


@each_function
def test_mostly_equal_values(connection: duckdb.DuckDBPyConnection, function: Function) -> None:
    """More than half of the values tied: no error, nothing NaN."""
    groups = [[2.0] * 9 + [5.0], [2.0] * 9 + [1.0, 3.0, 4.0], [0.0] * 50 + [1.0] * 50]
    for answer in answers(connection, function, groups):
        assert not any(x is not None and math.isnan(x) for _, x in figures(function, answer))


def wild(x: float, y: float) -> list[float]:
    return [*SKEWED[:39], x, y]


@pytest.mark.parametrize("name", [f.name for f in AGGREGATES if f.family != "association"])
def test_infinities_that_are_cut_do_no_harm(
    connection: duckdb.DuckDBPyConnection, name: str
) -> None:
    """Where huge values leave an estimate where it is, infinite ones in their place do too."""
    function = AGGREGATES[NAMES.index(name)]
    groups = [wild(1e300, 2e300), wild(math.inf, math.inf)]
    groups += [wild(-1e300, -2e300), wild(-math.inf, -math.inf)]
    up, inf_up, down, inf_down = answers(connection, function, groups)
    for huge, infinite in ((up, inf_up), (down, inf_down)):
        unmoved = all(x is not None and abs(x) < 1e6 for _, x in figures(function, huge))
        assert unmoved or function.name not in RESISTANT
        if unmoved and function.family != "re-expression":  # a logarithm takes 1e300 for 690
            assert bits([infinite]) == bits([huge])


@pytest.mark.parametrize("name", sorted(RESISTANT))
def test_one_infinity_at_each_end(connection: duckdb.DuckDBPyConnection, name: str) -> None:
    function = AGGREGATES[NAMES.index(name)]
    clean, spoilt = answers(connection, function, [SKEWED, wild(-math.inf, math.inf)])
    for (_, expected), (_, number) in zip(
        figures(function, clean), figures(function, spoilt), strict=True
    ):
        assert number is not None and expected is not None
        assert math.isfinite(number) and abs(number - expected) < 2 * max(SKEWED)


@each_function
def test_infinite_groups_give_no_error(
    connection: duckdb.DuckDBPyConnection, function: Function
) -> None:
    inf = math.inf
    groups = [[inf], [-inf, inf], [inf] * 5, [1.0, inf], [1.0, 2.0, inf, inf, inf]]
    groups += [[-inf, -inf, 0.0, inf, inf], [-inf] * 4 + [inf] * 4, [-inf, 1.0, 2.0, 3.0, 4.0]]
    found = answers(connection, function, [*groups, SKEWED])
    assert len(found) == len(groups) + 1
    assert bits([found[-1]]) == bits(answers(connection, function, [SKEWED]))
    if function.family in ("location", "weighted"):
        assert found[0] == inf and found[2] == inf


@each_function
def test_the_order_of_rows_does_not_show(
    connection: duckdb.DuckDBPyConnection, function: Function, generator: np.random.Generator
) -> None:
    groups, seconds = [], []
    for n in (2, 3, 5, 8, 9, 31, 200, 700):
        x = np.round(generator.lognormal(3.0, 1.0, n), 1)  # with ties
        w = np.round(generator.uniform(0.0, 3.0, n), 2)
        for order in (np.arange(n), generator.permutation(n), np.argsort(x), np.argsort(-x)):
            groups.append(x[order].tolist())
            seconds.append(w[order].tolist())
    found = [bits([answer]) for answer in answers(connection, function, groups, seconds)]
    for first in range(0, len(found), 4):
        assert found[first : first + 4] == [found[first]] * 4


@each_function
def test_negative_zero_is_zero(connection: duckdb.DuckDBPyConnection, function: Function) -> None:
    positive = [0.0, 0.0, 0.0, 1.0, -2.0, 0.0]
    mixed = [-0.0, 0.0, -0.0, 1.0, -2.0, -0.0]
    groups = [positive, mixed, mixed[::-1], [0.0] * 5, [-0.0] * 5, [-0.0, 0.0, 0.0, -0.0, 0.0]]
    found = [bits([answer]) for answer in answers(connection, function, groups)]
    assert found[0] == found[1] == found[2]
    assert found[3] == found[4] == found[5]


@each_function
def test_tiny_and_huge_values(connection: duckdb.DuckDBPyConnection, function: Function) -> None:
    """Within a factor of 10 of a double's limits: no error, no NaN, location among the values."""
    shape = (1.0, 2.0, 3.0, 5.0, 5.0, 8.0, 9.0, 4.0, 7.0)
    groups = [[5e-324 * v for v in shape], [1e-310 * v for v in shape], [1e307 * v for v in shape]]
    groups += [[-1e307 * v for v in shape], [1.7e308, 1.6e308, 1.65e308, 1.7e308, 1.62e308]]
    for group, answer in zip(groups, answers(connection, function, groups), strict=True):
        for family, number in figures(function, answer):
            assert number is None or not math.isnan(number)
            if family == "location" and not function.fields:
                assert number is not None and min(group) <= number <= max(group)
            if family == "scale":
                assert number is not None and 0.0 <= number <= 10 * (max(group) - min(group))


def test_one_query_with_every_function(connection: duckdb.DuckDBPyConnection) -> None:
    """All of them side by side answer as each alone does."""
    groups = [SKEWED, SKEWED[:4], [], [1.0, math.nan], [2.5] * 6]
    together = rows(connection, AGGREGATES, groups)
    for place, function in enumerate(AGGREGATES):
        alone = answers(connection, function, groups)
        assert bits([row[place] for row in together]) == bits(alone)
