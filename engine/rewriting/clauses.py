"""The clauses of every SELECT in a text, found from its tokens.

DuckDB's tree says what a query means but not where its clauses stand; this says where.
"""

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from typing import Final

from midspread.engine.parsing import Token, brackets

_CLAUSES: Final = (
    "SELECT",
    "FROM",
    "WHERE",
    "GROUP",
    "HAVING",
    "WINDOW",
    "QUALIFY",
    "ORDER",
    "LIMIT",
    "OFFSET",
    "USING",
)
_SET_OPERATIONS: Final = ("UNION", "INTERSECT", "EXCEPT")
_FOLLOWED_BY: Final[Mapping[str, str]] = {"GROUP": "BY", "ORDER": "BY", "USING": "SAMPLE"}
_PREFIXES: Final = ("DESCRIBE", "DESC", "SUMMARIZE", "SHOW")
_BEFORE_FROM: Final = ("ALL", "NAME", "DISTINCT", *_PREFIXES)


@dataclass
class Clauses:
    """One SELECT: token ranges of its clauses, and where a WITH in front of it may go.

    Attributes
    ----------
    ranges : dict
        Clause keyword to the tokens behind it, as a half-open range.
    first, end : int
        The first token and the one behind the last.
    with_end : int or None
        The token that ends the definitions of the WITH in front, if there is one.
    query_first : int
        The first token of the query that this SELECT is (a part of a set operation of).
    """

    first: int
    query_first: int
    with_end: int | None
    end: int = 0
    ranges: dict[str, tuple[int, int]] = field(default_factory=dict)


class ClauseMap:
    """Finds the SELECT around a token and the items of its SELECT list."""

    def __init__(self, found: tuple[Token, ...]) -> None:
        self._tokens = found
        self._around = brackets(found)
        self._selects: dict[int, list[Clauses]] = {}
        self._levels: dict[int, list[int]] = {}
        for index, level in enumerate(self._around):
            self._levels.setdefault(level, []).append(index)
        for level, indices in self._levels.items():
            self._selects[level] = list(self._read(indices))

    def enclosing(self, index: int) -> Iterator[tuple[Clauses, str]]:
        """Every SELECT around a token with the clause it stands in, the innermost first."""
        level = self._around[index]
        while True:
            for select in self._selects.get(level, []):
                for keyword, (start, stop) in select.ranges.items():
                    if start <= index < stop:
                        yield select, keyword
            if level == -1:
                return
            index, level = level, self._around[level]

    def definitions_around(self, index: int) -> list[tuple[int, int]]:
        """The token ranges of all WITH definitions that a token can see, the outermost first."""
        found: list[tuple[int, int]] = []
        level = self._around[index]
        while True:
            indices = self._levels[level]
            end = self._end_of_with(indices)
            if end is not None:
                is_recursive = self._tokens[indices[0] + 1].says("RECURSIVE")
                found.insert(0, (indices[0] + (2 if is_recursive else 1), end))
            if level == -1:
                return found
            level = self._around[level]

    def items(self, select: Clauses) -> list[tuple[int, int]]:
        """The token ranges of the items of a SELECT list."""
        start, stop = select.ranges["SELECT"]
        if start < stop and self._tokens[start].says("ALL", "DISTINCT"):
            start += 1
            if start < stop and self._tokens[start].says("ON"):
                start = self.closing(start + 1) + 1
        return self.split(start, stop)

    def split(self, start: int, stop: int) -> list[tuple[int, int]]:
        """A range of tokens split at its outermost commas."""
        if start >= stop:
            return []
        level = self._around[start]
        parts, first = [], start
        for index in range(start, stop):
            if self._tokens[index].text == "," and self._around[index] == level:
                parts.append((first, index))
                first = index + 1
        if first < stop:
            parts.append((first, stop))
        return parts

    def level(self, index: int) -> int:
        """The opening bracket around a token, -1 when there is none."""
        return self._around[index]

    def closing(self, opening: int) -> int:
        """The bracket that closes an opening one."""
        level = self._around[opening]
        for index in range(opening + 1, len(self._tokens)):
            if self._tokens[index].text in (")", "]", "}") and self._around[index] == level:
                return index
        return len(self._tokens)

    def _read(self, indices: list[int]) -> Iterator[Clauses]:
        """The SELECTs among the tokens of one bracket."""
        first = next((i for i in indices if not self._tokens[i].says(*_PREFIXES)), indices[0])
        with_end = self._end_of_with(indices)
        select: Clauses | None = None
        keyword, since = "", 0
        for position, index in enumerate(indices):
            word = self._clause(indices, position)
            if word is None:
                continue
            if select is not None:
                select.ranges[keyword] = (since, index)
                is_next = word == "SELECT" and "SELECT" in select.ranges
                if word in _SET_OPERATIONS or is_next:
                    select.end = index
                    yield select
                    select = None
            if word in _SET_OPERATIONS:
                continue
            if select is None:
                if word not in ("SELECT", "FROM"):
                    continue
                if word == "FROM" and not self._starts_query(indices, position):
                    continue
                select = Clauses(index, first, with_end)
            keyword, since = word, index + (2 if word in _FOLLOWED_BY else 1)
        if select is not None:
            select.end = self._behind(indices[-1])
            select.ranges[keyword] = (since, select.end)
            yield select

    def _behind(self, last: int) -> int:
        """The token behind the last one of a bracket's contents."""
        if self._tokens[last].text in ("(", "[", "{"):
            return self.closing(last)
        return last + 1

    def _clause(self, indices: list[int], position: int) -> str | None:
        index = indices[position]
        token = self._tokens[index]
        word = token.text.upper()
        if not token.is_keyword or word not in (*_CLAUSES, *_SET_OPERATIONS):
            return None
        before = self._tokens[index - 1] if index else None
        after = self._tokens[index + 1] if index + 1 < len(self._tokens) else None
        if before is not None and before.says(".", "AS"):
            return None
        if word in _FOLLOWED_BY and (after is None or not after.says(_FOLLOWED_BY[word])):
            return None
        if word == "FROM" and before is not None and before.says("DISTINCT"):
            return None
        if word == "EXCEPT" and before is not None and before.text == "*":
            return None
        return word

    def _starts_query(self, indices: list[int], position: int) -> bool:
        index = indices[position]
        if position == 0 or index == self._end_of_with(indices):
            return True
        before = self._tokens[index - 1]
        return before.says(*_BEFORE_FROM, *_SET_OPERATIONS)

    def _end_of_with(self, indices: list[int]) -> int | None:
        """The token behind the definitions of a WITH that these tokens begin with."""
        if not self._tokens[indices[0]].says("WITH"):
            return None
        for index in indices[1:]:
            if self._tokens[index - 1].text == ")" and not self._tokens[index].says(
                ",", "AS", "USING"
            ):
                return index
        return None
