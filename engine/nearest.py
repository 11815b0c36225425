"""The name that somebody probably meant."""

from collections.abc import Iterable
from difflib import get_close_matches
from pathlib import Path


def nearest(name: str, known: Iterable[str], likeness: float = 0.6) -> str | None:
    """The known name most like another one, None when none is much like it.

    Examples
    --------
    >>> nearest("trimed_mean", ["trimmed_mean", "median"])
    'trimmed_mean'
    """
    by_key = {one.lower(): one for one in known if one != name}
    found = get_close_matches(name.lower(), by_key, n=1, cutoff=likeness)
    return by_key[found[0]] if found else None


def nearest_file(path: str) -> str | None:
    """A file beside a missing one whose name is much like it."""
    missing = Path(path)
    try:
        beside = [entry.name for entry in missing.parent.iterdir() if entry.is_file()]
    except OSError:
        return None
    found = nearest(missing.name, beside, likeness=0.75)
    return str(missing.parent / found) if found else None


def did_you_mean(found: str | None, otherwise: str) -> str:
    """The end of a sentence about an unknown name."""
    return f"did you mean {found}?" if found else otherwise
