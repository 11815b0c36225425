"""Functions found by the words an analyst may use."""

import pytest

from midspread.cli.function_search import SYNONYMS, find, nearest
from midspread.udfs import functions


def place(word: str, name: str) -> int:
    return find(word, functions()).index(name)


@pytest.mark.parametrize(
    ("word", "families"),
    [
        ("spread", {"scale"}),
        ("typical", {"location", "weighted"}),
        ("weights", {"weighted"}),
    ],
)
def test_a_word_leads_to_its_family_first(word: str, families: set[str]) -> None:
    found = find(word, functions())
    assert {functions()[name].family for name in found[:2]} <= families
    for name, function in functions().items():
        if function.family in families and not name.endswith("_se"):
            assert name in found


@pytest.mark.parametrize(
    ("word", "name"),
    [
        ("outlier", "fences"),
        ("Outliers", "fences"),
        ("tail", "moors_kurtosis"),
        ("skew", "bowley_skew"),
        ("asymmetry", "medcouple"),
        ("percentile", "quantile_hf"),
        ("mode", "half_sample_mode"),
        ("standard error", "trimmed_mean_se"),
        ("boxplot", "letter_values"),
        ("summary", "robust_summary"),
        ("duplicates", "value_profile"),
        ("sentinel", "value_profile"),
    ],
)
def test_a_word_leads_to_the_function(word: str, name: str) -> None:
    assert place(word, name) < 3


def test_every_synonym_leads_somewhere() -> None:
    assert [word for word in SYNONYMS if not find(word, functions())] == []


def test_what_has_to_do_with_nothing_finds_nothing() -> None:
    assert find("zebra", functions()) == []
    assert find("", functions()) == []


def test_all_words_must_fit() -> None:
    assert "trimmed_mean" not in find("trimmed zebra", functions())
    assert find("weighted median", functions())[0] == "weighted_median"


@pytest.mark.parametrize(
    ("typed", "meant"),
    [("trimed_mean", "trimmed_mean"), ("MAD_SCLAE", "mad_scale"), ("sprad", "spread")],
)
def test_a_misspelt_word_has_a_near_one(typed: str, meant: str) -> None:
    assert nearest(typed, functions())[0] == meant
