"""Texts and headers broken into lines that fit a column."""

import re
from collections.abc import Iterable

from rich.cells import cell_len, chop_cells

# A header is broken behind these, and nowhere else.
_HEADER_PIECES = re.compile(r"[^_.( ]*[_.( ]*")


def longest(texts: Iterable[str]) -> int:
    """The width of the widest text on a terminal."""
    return max(map(cell_len, texts), default=0)


def wrapped(text: str, width: int) -> list[str]:
    """Lines of at most a width, broken between words, inside a word only where it is too long.

    Examples
    --------
    >>> wrapped("few values; half of them equal", 12)
    ['few values;', 'half of them', 'equal']
    """
    lines: list[str] = []
    for paragraph in text.split("\n"):
        lines += [paragraph] if cell_len(paragraph) <= width else _wrapped_words(paragraph, width)
    return lines


def _wrapped_words(paragraph: str, width: int) -> list[str]:
    lines, line = [], ""
    for word in paragraph.split(" "):
        longer = f"{line} {word}" if line else word
        if cell_len(longer) <= width:
            line = longer
            continue
        if line:
            lines.append(line)
        *full, line = chop_cells(word, width) or [""]
        lines += full
    return [*lines, line]


def header_lines(name: str, width: int) -> list[str]:
    """A header broken behind underscores, points, brackets and spaces; a piece is never cut.

    Examples
    --------
    >>> header_lines("trimmed_mean_10", 8)
    ['trimmed_', 'mean_10']
    """
    lines = [""]
    for piece in _HEADER_PIECES.findall(name):
        if lines[-1] and cell_len((lines[-1] + piece).rstrip()) > width:
            lines.append("")
        lines[-1] += piece
    return [line.rstrip() for line in lines if line] or [name]
