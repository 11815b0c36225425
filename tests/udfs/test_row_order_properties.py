"""The order in which rows arrive must not show, down to the last bit."""

import math

import numpy as np
import pytest

CALLS = [
    ("huber_location", {}),
    ("bisquare_location", {}),
    ("half_sample_mode", {}),
    ("harrell_davis", {"prob": 0.9}),
    ("quantile_hf", {"prob": 0.3, "kind": 8}),
    ("bisquare_scale", {}),
    ("l_moments", {}),
    ("letter_values", {}),
    ("weighted_median", {}),
    ("weighted_trimmed_mean", {"share": 0.13}),
]


@pytest.mark.parametrize(("name", "parameters"), CALLS)
def test_row_order_does_not_show(estimate, generator, name, parameters):
    from midspread.udfs import functions

    # Ties with unequal weights among them
    values = np.round(generator.gamma(2, 20, 500), 1)
    columns = [values, generator.uniform(0, 1, 500)][: len(functions()[name].columns)]
    first = estimate(name, *columns, **parameters)
    for _ in range(3):
        order = generator.permutation(500)
        assert estimate(name, *(column[order] for column in columns), **parameters) == first


@pytest.mark.parametrize(("name", "parameters"), CALLS)
def test_null_is_skipped_and_nothing_gives_null(estimate, name, parameters):
    from midspread.udfs import functions

    weights = [[1.0] * 5][: len(functions()[name].columns) - 1]
    assert estimate(name, [None] * 5, *weights, **parameters) is None
    some = estimate(name, [1.0, None, 4.0, 2.0, 8.0], *weights, **parameters)
    fewer = [column[:4] for column in weights]
    assert some == estimate(name, [1.0, 4.0, 2.0, 8.0], *fewer, **parameters)


@pytest.mark.parametrize(("name", "parameters"), [c for c in CALLS if c[0] != "letter_values"])
def test_nan_makes_the_result_nan(estimate, name, parameters):
    from midspread.udfs import functions

    weights = [[1.0] * 5][: len(functions()[name].columns) - 1]
    found = estimate(name, [1.0, math.nan, 4.0, 2.0, 8.0], *weights, **parameters)
    numbers = found.values() if isinstance(found, dict) else [found]
    assert all(math.isnan(number) for number in numbers)


def test_nan_makes_letter_values_nan(estimate):
    rows = estimate("letter_values", [1.0, math.nan, 4.0])
    assert rows
    assert all(math.isnan(row["mid"]) and math.isnan(row["spread"]) for row in rows)
