"""Folders for what the engine moves out of memory."""

import shutil
import tempfile
import weakref
from pathlib import Path
from typing import Any


def scratch_folder(owner: object) -> tuple[Path, "weakref.finalize[..., Any]"]:
    """A new folder, and how to remove it: by a call, else with its owner or the process.

    Parameters
    ----------
    owner : object
        Whoever writes to the folder.

    Returns
    -------
    tuple of Path and weakref.finalize
        The folder; what removes it, callable more than once.
    """
    folder = Path(tempfile.mkdtemp(prefix="midspread-"))
    return folder, weakref.finalize(owner, shutil.rmtree, folder, ignore_errors=True)
