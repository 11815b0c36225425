"""Functions found by meaning: a word such as "spread" leads to the scales."""

import difflib
import re
from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Final

if TYPE_CHECKING:
    from midspread.udfs import Function

_WORD: Final = re.compile(r"[a-z0-9]+")

# What a hit in each place counts.
_NAME, _SYNONYM, _FAMILY, _MEANING, _RESULT, _REST = 12.0, 8.0, 9.0, 4.0, 2.0, 1.0
# A table of many figures is named after what it does, an estimator after what it is.
_TABLE_NAME = 6.0

# Words an analyst may think of, and the words by which the catalogue speaks of the same.
SYNONYMS: Final[Mapping[str, tuple[str, ...]]] = {
    "average": ("location", "mean", "trimmed", "median"),
    "centre": ("location", "median", "middle"),
    "center": ("location", "median", "middle"),
    "typical": ("location", "trimmed", "median"),
    "middle": ("median", "location"),
    "level": ("location",),
    "spread": ("scale", "mad", "midspread"),
    "dispersion": ("scale",),
    "variability": ("scale",),
    "variance": ("scale", "sd"),
    "deviation": ("scale", "sd", "mad"),
    "stddev": ("scale", "sd"),
    "outlier": ("fences", "outside", "trimmed"),
    "anomaly": ("fences", "outside"),
    "extreme": ("fences", "outside", "trimmed", "winsorized"),
    "wild": ("fences", "trimmed", "huber"),
    "limit": ("fences",),
    "boxplot": ("fences", "fourths", "letter"),
    "box": ("fences", "letter"),
    "tail": ("kurtosis", "tails", "letter", "octile", "trimmed"),
    "heavy": ("kurtosis", "tails", "moments"),
    "kurtosis": ("kurtosis", "moments"),
    "skew": ("skew", "medcouple", "skewness"),
    "skewed": ("skew", "medcouple", "adjusted"),
    "asymmetry": ("skew", "medcouple"),
    "symmetry": ("skew", "medcouple", "letter"),
    "lopsided": ("skew", "medcouple"),
    "weight": ("weighted",),
    "correlation": ("association", "correlation", "spearman", "kendall"),
    "relation": ("association", "correlation"),
    "depend": ("association", "correlation"),
    "regression": ("line", "slope", "association"),
    "trend": ("slope", "line", "association"),
    "percentile": ("quantile",),
    "quartile": ("quantile", "fourths", "iqr"),
    "peak": ("mode",),
    "frequent": ("mode", "profile"),
    "error": ("se", "standard"),
    "uncertainty": ("resampling", "interval", "bootstrap", "se", "standard"),
    "confidence": ("resampling", "interval", "bootstrap", "se", "standard"),
    "clean": ("profile", "sentinels"),
    "quality": ("profile", "sentinels"),
    "missing": ("profile", "null"),
    "sentinel": ("profile", "sentinels"),
    "duplicate": ("profile", "duplicated"),
    "summary": ("summary", "profile"),
    "describe": ("summary", "profile"),
    "robust": ("location", "scale", "breakdown"),
    "shape": ("shape",),
    "mad": ("mad", "deviation"),
    "transform": ("re", "expression", "power", "rung"),
    "logarithm": ("rung", "log", "power"),
    "normality": ("power", "normal"),
    "straighten": ("straightening", "power", "rung"),
    "cut": ("trimmed", "trim"),
}


@dataclass(frozen=True)
class Match:
    """A function and how well it fits the words."""

    name: str
    score: float


def find(words: str, catalogue: Mapping[str, "Function"]) -> list[str]:
    """Names of the functions that fit the words, best first.

    Parameters
    ----------
    words : str
        One or several words; a function fits when every one of them leads to it.
    catalogue : mapping
        The functions to look among.

    Returns
    -------
    list of str
        Empty where nothing fits.
    """
    asked = _words(words)
    if not asked:
        return []
    scores = {
        name: [_score(word, _places(function)) for word in asked]
        for name, function in catalogue.items()
    }
    found = [Match(name, sum(each)) for name, each in scores.items() if min(each) > 0]
    found.sort(key=lambda match: (-match.score, match.name))
    # A passing mention is no answer when other functions are about the word itself.
    worth = max((match.score for match in found), default=0.0) / 3
    return [match.name for match in found if match.score >= worth]


def nearest(word: str, catalogue: Mapping[str, "Function"]) -> list[str]:
    """Names and known words spelt much like a word, nearest first."""
    known = [*catalogue, *(synonym for synonym in SYNONYMS if find(synonym, catalogue))]
    return difflib.get_close_matches(word.lower(), known, n=3, cutoff=0.6)


def _places(function: "Function") -> list[tuple[float, frozenset[str]]]:
    family = {function.family, "weighted"} if "w" in function.columns else {function.family}
    return [
        (
            _TABLE_NAME if function.kind == "table" else _NAME,
            frozenset(_words(function.name)),
        ),
        (_FAMILY, frozenset(family)),
        (_MEANING, frozenset(_words(function.meaning))),
        (_RESULT, frozenset(_words(" ".join(function.fields)))),
        (_REST, frozenset(_words(f"{function.description} {function.formula}"))),
    ]


def _score(word: str, places: list[tuple[float, frozenset[str]]]) -> float:
    score = sum(worth for worth, words in places if word in words)
    for i, synonym in enumerate(SYNONYMS.get(word, ())):
        # the first synonym is the best one; a hit in the name or family counts most
        hits = [worth for worth, words in places if _stem(synonym) in words]
        if hits and max(hits) >= _MEANING:
            score += _SYNONYM * max(hits) / _NAME / (1 + i / 4)
    return score


def _words(text: str) -> list[str]:
    return [_stem(word) for word in _WORD.findall(text.lower())]


def _stem(word: str) -> str:
    """The singular, so that outliers finds what outlier does."""
    if len(word) > 3 and word.endswith("s") and not word.endswith("ss"):
        return word[:-1]
    return word
