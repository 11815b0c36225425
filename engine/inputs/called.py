"""Which of our functions a piece of SQL names."""

import re
from collections.abc import Mapping
from typing import Final

from midspread.udfs import Function

_WORD: Final = re.compile(r"\w+")


def named_in(sql: str, functions: Mapping[str, Function]) -> dict[str, Function]:
    """Those of the functions whose names stand in it as words, also within its texts.

    Examples
    --------
    >>> from midspread.udfs import functions
    >>> list(named_in("SELECT jackknife(x, 'trimmed_mean(0.1)')", functions()))
    ['trimmed_mean', 'jackknife']
    """
    words = set(_WORD.findall(sql.lower()))
    return {name: function for name, function in functions.items() if name in words}
