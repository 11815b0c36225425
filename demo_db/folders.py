"""The demo's folder: whether it is ours, building beside it, putting it in place at the end."""

import glob
import json
import shutil
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

MANIFEST = "larkmoor.json"
MAKER = "midspread.demo_db"
# Raised whenever the same number of visits would give other rows than before.
EDITION = 1


class DemoError(Exception):
    """The demo database cannot be built; the message is one sentence for the user."""


def holds_demo(folder: Path, visits: int) -> bool:
    """Say whether a folder holds this very demo; refuse one that is somebody else's.

    Returns
    -------
    bool
        False where there is nothing in the way: no such folder, or an empty one.

    Raises
    ------
    DemoError
        Where the path is a file, or the folder holds anything else.
    """
    try:
        if not folder.is_dir():
            if folder.exists() or folder.is_symlink():
                raise DemoError(
                    f"The demo database needs a folder, but {folder} is a file; "
                    "choose another place."
                )
            return False
        if not any(folder.iterdir()):
            return False
        manifest = _manifest_of(folder)
    except OSError as error:
        raise DemoError(
            f"The demo database cannot look into {folder} ({error.strerror}); "
            "choose a folder that you may read and write."
        ) from error
    if manifest is None:
        raise DemoError(
            f"The folder {folder} holds files that are not the demo database; "
            "choose a new or empty folder, nothing was changed."
        )
    if manifest.get("edition") != EDITION:
        raise DemoError(
            f"The folder {folder} holds a demo database of another version of midspread; "
            "choose a new or empty folder, nothing was changed."
        )
    if manifest.get("visits") != visits:
        raise DemoError(
            f"The folder {folder} holds a demo database of {manifest.get('visits')} visits, "
            f"not {visits}; ask for as many or choose a new or empty folder, nothing was changed."
        )
    if not _is_whole(folder, manifest):
        raise DemoError(
            f"The folder {folder} holds a demo database some of whose files were changed or "
            "removed; choose a new or empty folder, nothing was changed."
        )
    return True


@contextmanager
def staging(folder: Path) -> Iterator[Path]:
    """Yield a temporary folder to build in, gone at the end whatever happens.

    It stands beside the folder to come, so that a rename puts it in place; inside a folder that
    exists already, because that may be a mount or somebody's working directory.
    """
    made: list[Path] = []
    try:
        for parent in reversed([above for above in folder.parents if not above.exists()]):
            parent.mkdir()
            made.append(parent)
        home = folder if folder.is_dir() else folder.parent
        outer = Path(tempfile.mkdtemp(prefix=f".{folder.name}-unfinished-", dir=home))
        try:
            # mkdtemp's folder is for its owner alone; what is published is an ordinary one
            staged = outer / "demo"
            staged.mkdir()
            yield staged
        finally:
            shutil.rmtree(outer, ignore_errors=True)
    except BaseException:
        for parent in reversed(made):
            # only while still empty: somebody may have put a file there meanwhile
            if parent.is_dir() and not any(parent.iterdir()):
                parent.rmdir()
        raise


def publish(staged: Path, folder: Path, visits: int) -> None:
    """Put a finished demo in place; the manifest is written last and makes it valid."""
    sizes = {file.name: file.stat().st_size for file in sorted((staged / "dwell").iterdir())}
    manifest = {"built_by": MAKER, "edition": EDITION, "visits": visits, "dwell": sizes}
    (staged / MANIFEST).write_text(json.dumps(manifest, indent=2) + "\n", encoding="utf-8")
    if not folder.is_dir():
        staged.rename(folder)
        return
    moved: list[Path] = []
    try:
        for name in ("dwell", "warehouse.duckdb", MANIFEST):
            target = folder / name
            if target.exists():
                raise DemoError(
                    f"Something called {name} appeared in {folder} while the demo database "
                    "was being built; choose a new or empty folder, nothing of yours was changed."
                )
            (staged / name).rename(target)
            moved.append(target)
    except BaseException:
        for target in moved:
            target.rename(staged / target.name)
        raise


def glob_of(dwell: Path) -> str:
    """Return the glob of the Parquet files in a folder, whatever characters its path has."""
    return str(Path(glob.escape(str(dwell))) / "*.parquet")


def _manifest_of(folder: Path) -> dict[str, Any] | None:
    try:
        manifest = json.loads((folder / MANIFEST).read_text(encoding="utf-8"))
    except (FileNotFoundError, IsADirectoryError, ValueError):
        return None
    is_ours = isinstance(manifest, dict) and manifest.get("built_by") == MAKER
    return manifest if is_ours else None


def _is_whole(folder: Path, manifest: dict[str, Any]) -> bool:
    # The warehouse is only asked to be there: a client that opens it may touch its size.
    sizes = manifest.get("dwell")
    if not isinstance(sizes, dict) or not (folder / "warehouse.duckdb").is_file():
        return False
    files = {file.name: file.stat().st_size for file in (folder / "dwell").glob("*")}
    return files == sizes
