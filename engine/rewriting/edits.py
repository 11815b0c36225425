"""Replacements in a text, and the way back from the new text to the old one."""

from collections.abc import Iterable, Sequence
from dataclasses import dataclass


@dataclass(frozen=True)
class Edit:
    """Replace ``text[start:stop]``; an insertion has ``start == stop``."""

    start: int
    stop: int
    text: str


def without_overlaps(edits: Iterable[Edit]) -> list[Edit]:
    """The edits in order, leaving out those that lie within another one.

    Insertions at one place stay in the order in which they were given.
    """
    kept: list[Edit] = []
    for edit in sorted(
        dict.fromkeys(edits), key=lambda edit: (edit.start, edit.stop > edit.start, -edit.stop)
    ):
        if kept and edit.start < kept[-1].stop:
            continue
        kept.append(edit)
    return kept


def apply(text: str, edits: Sequence[Edit]) -> str:
    """The text with ordered edits made.

    Examples
    --------
    >>> apply("a + b", [Edit(0, 1, "x"), Edit(5, 5, " + c")])
    'x + b + c'
    """
    parts, at = [], 0
    for edit in edits:
        parts += [text[at : edit.start], edit.text]
        at = edit.stop
    return "".join([*parts, text[at:]])


def origin(position: int, edits: Sequence[Edit]) -> int:
    """Where a place of the new text was in the old one; new words stand where the old ones did."""
    shift = 0
    for edit in edits:
        start = edit.start + shift
        if position < start:
            break
        if position < start + len(edit.text):
            return edit.start
        shift += len(edit.text) - (edit.stop - edit.start)
    return position - shift
