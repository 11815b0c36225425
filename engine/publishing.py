"""Giving a finished file its name in one step, so that nobody ever sees half of it."""

import os
from pathlib import Path


def publish(fresh: Path, path: Path) -> None:
    """Rename a finished file, refusing to replace another.

    Parameters
    ----------
    fresh : Path
        The finished file, in the same folder.
    path : Path
        Its name from now on.

    Raises
    ------
    FileExistsError
        When the name is taken; nothing is changed.
    """
    try:
        os.link(fresh, path)
    except FileExistsError:
        raise
    except OSError:  # a file system without hard links
        if path.exists():
            raise FileExistsError(f"{path} exists") from None
        fresh.rename(path)
    else:
        fresh.unlink()
