"""SQL text cut into tokens by the engine's own lexer, each with its exact text.

The engine is asked rather than a second lexer, because whatever decides that two queries are one
must cut the text exactly where the engine does (``@-`` is one operator, ``0x1F`` is two tokens,
comments nest).
"""

import re
from dataclasses import dataclass
from enum import Enum, auto
from functools import cached_property

import duckdb

_SPACE = " \t\n\r\f\v"
_DOLLAR_QUOTED = re.compile(r"\$[^$]*\$")


class Kind(Enum):
    """What a token is."""

    WORD = auto()
    QUOTED_NAME = auto()
    STRING = auto()
    NUMBER = auto()
    SYMBOL = auto()


@dataclass(frozen=True)
class Token:
    """One token.

    Attributes
    ----------
    kind : Kind
        What it is.
    text : str
        Exactly as written, without the space around it.
    gap : str
        What stood between the token before and this one: space, comments, both or nothing.
    start : int
        Where it starts in the text, in characters.
    """

    kind: Kind
    text: str
    gap: str
    start: int

    @cached_property
    def word(self) -> str:
        """Folded text of an unquoted word or symbol; "" for names in quotes and literals."""
        return self.text.casefold() if self.kind in (Kind.WORD, Kind.SYMBOL) else ""

    @cached_property
    def name(self) -> str | None:
        """The name a word or a quoted name spells, as written; None for anything else."""
        if self.kind is Kind.WORD:
            return self.text
        if self.kind is Kind.QUOTED_NAME:
            return self.text[1:-1].replace('""', '"')
        return None

    @cached_property
    def value(self) -> str | None:
        """What a string literal holds; None for other tokens and for escapes and bit strings."""
        if self.kind is not Kind.STRING:
            return None
        text = self.text
        if text[0] == "$":
            tag = _DOLLAR_QUOTED.match(text)
            return text[tag.end() : -tag.end()] if tag else None
        if text[0] in "eE" and "\\" not in text:
            text = text[1:]
        if len(text) < 2 or text[0] != "'" or text[-1] != "'":
            return None
        return text[1:-1].replace("''", "'")


def tokens_of(sql: str) -> list[Token]:
    """Cut SQL text into tokens, leaving out space and comments.

    Parameters
    ----------
    sql : str
        One or more statements, whether or not they parse.

    Returns
    -------
    list of Token
        In the order of the text; the gaps and texts joined give the text back, but for what
        follows the last token.
    """
    raw = sql.encode("utf-8", "surrogatepass")
    marks = duckdb.tokenize(sql)
    ends = [start for start, _ in marks[1:]] + [len(raw)][: len(marks)]
    tokens: list[Token] = []
    gap_start = 0
    position = 0
    for (start, category), end in zip(marks, ends, strict=True):
        if category == duckdb.token_type.comment:
            continue
        piece = raw[start:end].decode("utf-8", "surrogatepass")
        text = piece.rstrip(_SPACE)
        gap = raw[gap_start:start].decode("utf-8", "surrogatepass")
        position += len(gap)
        tokens.append(Token(_kind(category, text), text, gap, position))
        gap_start = start + len(text.encode("utf-8", "surrogatepass"))
        position += len(text)
    return tokens


def _kind(category: object, text: str) -> Kind:
    if category == duckdb.token_type.string_const:
        return Kind.STRING
    if category == duckdb.token_type.numeric_const:
        return Kind.NUMBER
    if category == duckdb.token_type.operator:
        return Kind.SYMBOL
    return Kind.QUOTED_NAME if text.startswith('"') else Kind.WORD
