"""Properties of the letter values."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from midspread.udfs import functions
from midspread.udfs.compiling import dispatcher
from midspread.udfs.shape.letter_values import LETTERS, letter_count, letter_values

samples = st.lists(st.integers(-30, 30).map(float), min_size=1, max_size=40) | st.lists(
    st.floats(-1e6, 1e6), min_size=1, max_size=200
)


def table(values):
    x = np.sort(np.asarray(values, float))
    out = np.full((letter_count(x.size), 6), np.nan)
    dispatcher(letter_values)(x, out)
    return out


def at(values, depth):
    """Mean of the one or two values at a depth, numpy counting."""
    ordered = np.sort(values)
    return (ordered[math.floor(depth) - 1] + ordered[math.ceil(depth) - 1]) / 2


@settings(deadline=None)
@given(samples)
def test_each_row_stands_at_its_depth(values):
    rows = table(values)
    depth = (len(values) + 1) / 2
    for place, (letter, found_depth, lower, mid, upper, spread) in enumerate(rows):
        assert (letter, found_depth) == (place, depth)
        assert lower == at(values, depth)
        assert upper == -at([-v for v in values], depth)
        assert mid == pytest.approx((lower + upper) / 2, abs=1e-300)
        assert spread == upper - lower
        depth = (math.floor(depth) + 1) / 2
    assert rows[-1][1] == 1
    assert rows[-1][2] == min(values)
    assert rows[-1][4] == max(values)


@settings(deadline=None)
@given(samples)
def test_rows_open_outwards(values):
    rows = table(values)
    assert (np.diff(rows[:, 2]) <= 0).all()
    assert (np.diff(rows[:, 4]) >= 0).all()
    assert (rows[:, 5] >= 0).all()


@settings(deadline=None)
@given(st.lists(st.integers(-(2**20), 2**20), min_size=1, max_size=60))
def test_mirrors_and_shifts(values):
    values = np.array(values, float) / 64
    rows = table(values)
    mirrored = table(-values)
    assert mirrored[:, 2] == pytest.approx(-rows[:, 4], abs=0)
    assert mirrored[:, 5] == pytest.approx(rows[:, 5], abs=0)
    shifted = table(values + 1e9)
    assert shifted[:, 5] == pytest.approx(rows[:, 5], abs=0)
    assert shifted[:, 3] - 1e9 == pytest.approx(rows[:, 3], abs=1.3e-7)


@pytest.mark.parametrize("n", [*range(1, 70), 10**3, 10**6, 10**8, 2**40])
def test_count_is_the_number_of_halvings(n):
    depth, count = (n + 1) / 2, 1
    while depth > 1:
        depth, count = (math.floor(depth) + 1) / 2, count + 1
    assert letter_count(n) == dispatcher(letter_count)(n) == count <= len(LETTERS)


def test_letters():
    assert len(set(LETTERS)) == len(LETTERS)
    assert LETTERS[:10] == ("M", "F", "E", "D", "C", "B", "A", "Z", "Y", "X")
    assert functions()["letter_values"].labels["letter"] == LETTERS


def test_infinite_values():
    rows = table([-math.inf, 1.0, 2.0, 3.0, math.inf, math.inf])
    assert rows[0, 2] == 2.5
    assert rows[-1, 2] == -math.inf
    assert math.isnan(rows[-1, 3])
    assert rows[-1, 5] == math.inf
    same = table([math.inf, math.inf])
    assert (same[:, 3] == math.inf).all()
    assert (same[:, 5] == 0).all()


def test_groups_side_by_side(connection):
    # Lists of different lengths in one batch, and a group with nothing in it
    rows = connection.sql(
        "SELECT g, letter_values(x) FROM (VALUES (1, 4.0), (1, 6.0), (2, NULL), (3, 1.0)) t(g, x) "
        "GROUP BY g ORDER BY g"
    ).fetchall()
    assert [(g, found and [row["letter"] for row in found]) for g, found in rows] == [
        (1, ["M", "F"]),
        (2, None),
        (3, ["M"]),
    ]
