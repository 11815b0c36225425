"""The k-th smallest of unsorted numbers."""

from typing import Final

from midspread.udfs.declaring import Values, compiled

GOLDEN: Final = 0.6180339887498949
"""Step of the evenly spread places that are looked at; fixed, and never seen in an answer."""

_SHORT: Final = 16


@compiled
def put_in_place(v: Values, k: int) -> float:
    """Rearrange v so that v[k] is what sorting would put there; return it.

    What lies before k is then no larger, what lies behind it no smaller. The numbers are divided
    without a branch that depends on them, once by < and, where ties may matter, once by ≤ the
    pivot, so that many equal values cost no extra rounds.
    """
    start, stop = 0, v.size
    place = 0.5
    while stop - start > _SHORT:
        size = stop - start
        looked_at = 5 if size < 200 else (11 if size < 2000 else 31)
        for taken in range(looked_at):
            place += GOLDEN
            place -= int(place >= 1.0)
            chosen = start + taken + int(place * (size - taken))
            kept = v[chosen]
            v[chosen] = v[start + taken]
            v[start + taken] = kept
        sort_short(v[start : start + looked_at])
        pivot = v[start + (k - start) * looked_at // size]
        smaller = start
        for i in range(start, stop):
            kept = v[i]
            v[i] = v[smaller]
            v[smaller] = kept
            smaller += int(kept < pivot)
        if k < smaller:
            stop = smaller
            continue
        start = smaller
        for i in range(smaller, stop):
            kept = v[i]
            v[i] = v[start]
            v[start] = kept
            start += int(kept <= pivot)
        if k < start:
            return v[k]
    sort_short(v[start:stop])
    return v[k]


@compiled
def sort_short(v: Values) -> None:
    """Sort a few numbers in place, by insertion."""
    for i in range(1, v.size):
        moved = v[i]
        j = i
        while j > 0 and v[j - 1] > moved:
            v[j] = v[j - 1]
            j -= 1
        v[j] = moved
