"""PIVOT statements that take their columns from the data.

DuckDB runs such a statement as several ones and therefore shows no syntax tree of it. With values
listed behind each ON expression it is a plain query again, and its tree is otherwise the same.
"""

import re
from typing import Final

import duckdb

from midspread.engine.parsing import NotParsed, Token, Tree, brackets, parse, tokens

_OPENED: Final = "(/* _midspread_pivot */ "
_LISTED: Final = ") IN ('_midspread_listed_value')"
_INSERTED: Final = re.compile(f"{re.escape(_OPENED)}|{re.escape(_LISTED)}")

_ENDS_ON: Final = ("USING", "GROUP", "ORDER", "LIMIT", "OFFSET", "UNION", "INTERSECT", "EXCEPT")


def without_listed_values(text: str) -> str | None:
    """The text with a value listed behind every ON expression that lists none.

    None when the text holds no PIVOT … ON without values.

    Examples
    --------
    >>> probe = without_listed_values("PIVOT visits ON day_part USING avg(dwell_s)")
    >>> probe.endswith("day_part) IN ('_midspread_listed_value') USING avg(dwell_s)")
    True
    """
    found = tokens(text)
    places = sorted(
        place
        for index, token in enumerate(found)
        if token.says("PIVOT", "PIVOT_WIDER")
        for place in _unlisted(found, index)
    )
    if not places:
        return None
    for start, stop in reversed(places):
        text = text[:start] + _OPENED + text[start:stop] + _LISTED + text[stop:]
    return text


def parse_with_pivots(connection: duckdb.DuckDBPyConnection, text: str) -> Tree:
    """The tree of a query, be it one that DuckDB shows no tree of because of a PIVOT in it.

    The tree's own text is then that of `without_listed_values`.
    """
    try:
        return parse(connection, text)
    except NotParsed as error:
        probe = None if error.is_syntax else without_listed_values(text)
        if probe is None:
            raise
        try:
            return parse(connection, probe)
        except NotParsed:
            raise error from None


def insertions(text: str) -> list[tuple[int, int]]:
    """What `without_listed_values` put into a text, as ranges of the text."""
    return [found.span() for found in _INSERTED.finditer(text)]


def _unlisted(found: tuple[Token, ...], pivot: int) -> list[tuple[int, int]]:
    """The ON expressions of one PIVOT that list no values."""
    around = brackets(found)
    level = around[pivot]
    places: list[tuple[int, int]] = []
    first: int | None = None
    listed = False
    for index in range(pivot + 1, len(found) + 1):
        at_end = index == len(found) or (
            level != -1 and found[index].text == ")" and around[index] == around[level]
        )
        if not at_end and around[index] != level:
            continue
        if first is None:
            if at_end:
                break
            if found[index].says("ON"):
                first = index + 1
            continue
        at_end = at_end or found[index].says(*_ENDS_ON)
        if at_end or found[index].text == ",":
            if not listed:
                places.append((found[first].start, found[index - 1].stop))
            if at_end:
                break
            first, listed = index + 1, False
        elif found[index].says("IN"):
            listed = True
    return places
