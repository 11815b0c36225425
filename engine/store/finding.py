"""Where the store is."""

import os
from collections.abc import Mapping
from pathlib import Path

STORE_NAME = "midspread.duckdb"
STORE_VARIABLE = "MIDSPREAD_STORE"


def find_store(
    folder: Path, explicit: Path | None = None, environment: Mapping[str, str] | None = None
) -> Path:
    """Find the store a command works with; nothing is created.

    Parameters
    ----------
    folder : Path
        Where the search starts.
    explicit : Path, optional
        The path the user named.
    environment : mapping, optional
        Environment variables; by default those of the process.

    Returns
    -------
    Path
        Absolute: the path named by the user, else by MIDSPREAD_STORE, else midspread.duckdb in the
        folder or the nearest one above that has it, else where it will be made: in the folder.
    """
    variables = os.environ if environment is None else environment
    named = explicit or variables.get(STORE_VARIABLE, "").strip() or None
    start = folder.expanduser().absolute()
    if named is not None:
        return start / Path(named).expanduser()
    for place in (start, *start.parents):
        candidate = place / STORE_NAME
        try:
            if candidate.is_file():
                return candidate
        except OSError:
            continue
    return start / STORE_NAME
