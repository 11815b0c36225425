"""What a change of origin, unit or sign does to every aggregate; bounds on drawn data."""

import math
from collections.abc import Sequence

import duckdb
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from midspread.udfs import Function
from tests.udfs import calling
from tests.udfs.calling import answers, bits, figures, partners, rows

AGGREGATES = tuple(f for f in calling.AGGREGATES if f.family != "re-expression")
NAMES = tuple(f.name for f in AGGREGATES)
each_function = pytest.mark.parametrize("function", AGGREGATES, ids=NAMES)
REPRODUCIBLE = settings(max_examples=60, deadline=None, derandomize=True)

EIGHTHS = st.integers(-(2**23), 2**23).map(lambda i: i / 8)
"""Numbers whose sums and differences are exact, also after a shift by 1e9."""
DRAWN = st.lists(EIGHTHS, min_size=1, max_size=40) | st.lists(
    st.sampled_from([-1.0, 0.0, 0.5, 2.0, 2.5, 900.0]), min_size=1, max_size=40
)

SIGNED = {"bowley_skew", "octile_skew", "medcouple"}
"""Shapes that change sign when the values do."""
LOOKS_ONE_WAY = {"half_sample_mode", "quantile_hf", "letter_values", "l_moments"}
"""Functions that a change of sign does not simply mirror; their own tests look at them."""


def samples(generator: np.random.Generator) -> list[list[float]]:
    """Groups of several sizes and shapes, in eighths."""
    groups = []
    for n in (2, 3, 4, 5, 7, 10, 23, 64, 301):
        groups.append(np.round(generator.lognormal(3.0, 1.0, n) * 8) / 8)
        groups.append(np.round(generator.normal(0.0, 50.0, n) * 8) / 8)
        groups.append(np.round(generator.normal(0.0, 2.0, n)))  # heavily tied
    return [group.tolist() for group in groups]


def moved(
    function: Function, before: object, after: object, shift: float, factor: float
) -> Sequence[tuple[float | None, float | None]]:
    """Pairs of what the figures must have become and what they became."""
    pairs = []
    for (family, old), (_, new) in zip(
        figures(function, before), figures(function, after), strict=True
    ):
        if old is not None and family == "location":
            old = old * factor + shift
        if old is not None and family == "level":
            old = old * factor + shift
        if old is not None and family in ("scale", "slope"):
            old = old * factor
        pairs.append((old, new))
    return pairs


@each_function
@pytest.mark.parametrize("shift", [1e9, -1e9, 2.0**40])
def test_shift(
    connection: duckdb.DuckDBPyConnection,
    function: Function,
    generator: np.random.Generator,
    shift: float,
) -> None:
    """The digits hold: scales and shapes lose none, locations what the sum itself rounds away."""
    groups = samples(generator)
    shifted = [[x + shift for x in group] for group in groups]
    before, after = answers(connection, function, groups), answers(connection, function, shifted)
    for old, new in zip(before, after, strict=True):
        for (family, _), (expected, got) in zip(
            figures(function, old), moved(function, old, new, shift, 1.0), strict=True
        ):
            if expected is None:
                assert got is None
            elif family == "location":
                assert got == pytest.approx(expected, rel=4.5e-16, abs=0.0)
            else:
                assert got == pytest.approx(expected, rel=1e-11, abs=1e-11)


@each_function
@pytest.mark.parametrize("power", [-300, -3, 1, 20, 300])
def test_unit_that_is_a_power_of_two(
    connection: duckdb.DuckDBPyConnection,
    function: Function,
    generator: np.random.Generator,
    power: int,
) -> None:
    """Exact in binary, so the same bits must come out, times the factor."""
    groups = samples(generator)
    factor = 2.0**power
    scaled = [[x * factor for x in group] for group in groups]
    before, after = answers(connection, function, groups), answers(connection, function, scaled)
    for old, new in zip(before, after, strict=True):
        pairs = moved(function, old, new, 0.0, factor)
        assert [bits(got) for _, got in pairs] == [bits(expected) for expected, _ in pairs]


@each_function
def test_unit_that_is_any_factor(
    connection: duckdb.DuckDBPyConnection, function: Function, generator: np.random.Generator
) -> None:
    """Seconds to minutes: rounding may break or make near-ties, so only to several digits."""
    if function.name == "half_sample_mode":
        pytest.skip("which half is densest may hang on the last bit")
    groups = [group for group in samples(generator) if len(group) > 9]
    scaled = [[x / 60 for x in group] for group in groups]
    before, after = answers(connection, function, groups), answers(connection, function, scaled)
    for old, new in zip(before, after, strict=True):
        for expected, got in moved(function, old, new, 0.0, 1 / 60):
            assert got == (
                None if expected is None else pytest.approx(expected, rel=1e-9, abs=1e-9)
            )


@pytest.mark.parametrize("name", [name for name in NAMES if name not in LOOKS_ONE_WAY])
def test_sign(
    connection: duckdb.DuckDBPyConnection, name: str, generator: np.random.Generator
) -> None:
    function = AGGREGATES[NAMES.index(name)]
    groups = samples(generator)
    mirrored = [[-x for x in group] for group in groups]
    # Measurements that stay as they are; weights would have to be all alike.
    kept = [partners(group) for group in groups] if function.family == "association" else None
    before = answers(connection, function, groups, kept, prob=0.5)
    after = answers(connection, function, mirrored, kept, prob=0.5)
    for old, new in zip(before, after, strict=True):
        if isinstance(old, dict) and "slope" in old:
            for key in ("slope", "intercept", "lower", "upper"):
                other = {"lower": "upper", "upper": "lower"}.get(key, key)
                expected = old.get(key)
                assert new.get(other) == (
                    None if expected is None else pytest.approx(-expected, rel=1e-12, abs=1e-12)
                )
            continue
        if isinstance(old, dict):
            assert -new["upper"] == pytest.approx(old["lower"], rel=1e-12)
            assert -new["lower"] == pytest.approx(old["upper"], rel=1e-12)
            continue
        if old is None:
            assert new is None
            continue
        turns = function.family in ("location", "weighted", "association") or name in SIGNED
        expected = -old if turns else old
        assert new == pytest.approx(expected, rel=1e-12, abs=1e-12)


@REPRODUCIBLE
@given(x=DRAWN)
def test_bounds(connection: duckdb.DuckDBPyConnection, x: list[float]) -> None:
    """Locations lie among the values, scales are not negative, skewness is between −1 and 1."""
    for function, answer in zip(AGGREGATES, rows(connection, AGGREGATES, [x])[0], strict=True):
        for family, number in figures(function, answer):
            assert number is None or math.isfinite(number)
            if number is None:
                continue
            if family == "location" and not function.fields:
                assert min(x) <= number <= max(x), function.name
            if family == "scale":
                assert number >= 0.0, function.name
        if isinstance(answer, dict) and answer.get("upper") is not None:
            assert answer["lower"] <= answer["upper"]
        if function.name in SIGNED and answer is not None:
            assert -1.0 <= answer <= 1.0
        if function.name == "l_moments":
            assert answer["t3"] is None or -1.0 <= answer["t3"] <= 1.0
            assert answer["t4"] is None or answer["t4"] <= 1.0


@REPRODUCIBLE
@given(x=DRAWN, weight=st.sampled_from([0.1, 1.0, 3.0, 1e-9, 7e12]))
def test_equal_weights_are_no_weights(
    connection: duckdb.DuckDBPyConnection, x: list[float], weight: float
) -> None:
    """The weighted median is then the median; the trimmed mean where share · n is whole."""
    by_name = dict(zip(NAMES, AGGREGATES, strict=True))
    weights = [[weight] * len(x)]
    weighted = answers(connection, by_name["weighted_median"], [x], weights)
    assert weighted == answers(connection, by_name["trimmed_mean"], [x], share=0.5)
    for g in range(len(x) // 2):
        share = g / len(x)
        if int(share * len(x)) == g:
            mine = answers(connection, by_name["weighted_trimmed_mean"], [x], weights, share=share)
            plain = answers(connection, by_name["trimmed_mean"], [x], share=share)
            assert mine == pytest.approx(plain, rel=1e-9, abs=1e-9 * max(map(abs, x)))
            break


@REPRODUCIBLE
@given(x=DRAWN, share=st.floats(0.0, 0.5))
def test_trimming_only_looks_at_what_it_keeps(
    connection: duckdb.DuckDBPyConnection, x: list[float], share: float
) -> None:
    """Moving the cut values outwards changes nothing; neither does sorting the rows."""
    g = int(share * len(x))
    ordered = sorted(x)
    stretched = [v - 1e6 for v in ordered[:g]] + ordered[g:]
    if g:
        stretched[-g:] = [v * 2 + 1e8 for v in stretched[-g:]]
    names = ("trimmed_mean", "winsorized_mean", "winsorized_sd", "trimmed_mean_se")
    chosen = [AGGREGATES[NAMES.index(name)] for name in names]
    first, second = rows(connection, chosen, [x, stretched], share=repr(share))
    if len(x) > 2 * g and share < 0.5:
        assert bits(first) == bits(second)
