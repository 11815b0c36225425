"""Numbers in tables: digits, decimals, thousands."""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from midspread.cli.numbers import (
    count_text,
    decimal_texts,
    single_text,
    size_text,
    whole_texts,
)


@pytest.mark.parametrize(
    ("numbers", "texts"),
    [
        ([17.0432198, 204.1129876], ["17.043", "204.113"]),
        ([16.2, 17.4, 3.0], ["16.2", "17.4", "3.0"]),
        ([1.0, 2.0, 30.0], ["1", "2", "30"]),
        ([None, 2.5], ["", "2.5"]),
        ([0.0, 0.0], ["0", "0"]),
        ([28731.0, 5.0], ["28,731", "5"]),
        ([9999.0, 5.0], ["9999", "5"]),
        ([12345678.9], ["12,345,679"]),
        ([0.00123456789], ["0.00123457"]),
        ([math.nan, math.inf, -math.inf, 1.5], ["NaN", "Inf", "-Inf", "1.5"]),
        ([-6.25, 6.25], ["-6.25", "6.25"]),
        ([6553.5, 0.0123], ["6553.5000", "0.0123"]),
    ],
)
def test_a_column_of_floats(numbers: list[float | None], texts: list[str]) -> None:
    assert decimal_texts(numbers) == texts


def test_a_rounding_error_does_not_blow_up_the_digits_of_the_others() -> None:
    assert decimal_texts([0.25, 1e-17]) == ["0.25", "1e-17"]


def test_sizes_too_far_apart_are_written_one_by_one() -> None:
    assert decimal_texts([1.25e9, 3.5e-4]) == ["1.25e+09", "0.00035"]


def test_very_large_and_very_small_numbers() -> None:
    assert single_text(1.5e300) == "1.5e+300"
    assert single_text(2.5e-12) == "2.5e-12"


@given(st.lists(st.floats(allow_nan=False, allow_infinity=False, width=32), min_size=1))
def test_what_is_shown_reads_back_close_to_the_number(numbers: list[float]) -> None:
    largest = max(abs(v) for v in numbers)
    for number, text in zip(numbers, decimal_texts(numbers), strict=True):
        shown = float(text.replace(",", ""))
        assert math.isclose(shown, number, rel_tol=5e-3, abs_tol=1e-12 * largest)
        assert (shown == 0) == (number == 0)


@given(st.lists(st.floats(0.001, 90000), min_size=2))
def test_points_stand_under_one_another(numbers: list[float]) -> None:
    ends = {len(text.partition(".")[2]) for text in decimal_texts(numbers)}
    assert len(ends) == 1


def test_whole_numbers() -> None:
    assert whole_texts([2031, 12, None]) == ["2031", "12", ""]
    assert whole_texts([20310, 1200, -5]) == ["20,310", "1,200", "-5"]


def test_counts_and_sizes() -> None:
    assert count_text(1, "row") == "1 row"
    assert count_text(0, "row") == "0 rows"
    assert count_text(28731, "row") == "28,731 rows"
    assert count_text(2, "query") == "2 queries"
    assert size_text(812) == "812 B"
    assert size_text(14_200) == "14.2 kB"
    assert size_text(1_350_000_000) == "1.35 GB"
