"""Whether a grid's contents still follow from what they rest on, and if not, why."""

import contextlib
import os
from collections.abc import Collection, Mapping
from dataclasses import dataclass
from datetime import datetime
from enum import StrEnum
from pathlib import Path
from typing import Any

import duckdb

from midspread.engine.grids.model import Grid, GridKind
from midspread.engine.inputs.files import match
from midspread.udfs import Function


class State(StrEnum):
    """What may be said of a grid's contents."""

    FRESH = "fresh"
    STALE = "stale"
    FAILED = "failed"


@dataclass(frozen=True)
class Freshness:
    """The state of a grid.

    Attributes
    ----------
    state : State
        Fresh, stale or failed.
    why : tuple of str
        What makes it stale, or why it failed; empty when fresh.
    """

    state: State
    why: tuple[str, ...] = ()


def freshness_of_all(
    grids: Mapping[str, Grid],
    connection: duckdb.DuckDBPyConnection,
    functions: Mapping[str, Function],
    store_folder: Path,
    names: Collection[str] | None = None,
) -> dict[str, Freshness]:
    """The state of every grid, by folded name.

    Parameters
    ----------
    grids : mapping
        Every grid of a store, by folded name.
    connection : duckdb.DuckDBPyConnection
        Where patterns of files are matched.
    functions : mapping
        Our functions by name, for their versions.
    store_folder : Path
        Where the store is: grids' folders are relative to it.
    names : collection of str, optional
        Only these grids, by folded name, and all they rest on.
    """
    looked_at: dict[tuple[str, str], list[list[Any]]] = {}
    found: dict[str, Freshness] = {}
    for name in in_order(grids, names):
        grid = grids[name]
        why = reasons(grid, grids, connection, functions, store_folder, looked_at)
        why += [
            f"{grids[other.casefold()].name} is {found[other.casefold()].state}"
            for other in grid.reads
            if other.casefold() in found and found[other.casefold()].state is not State.FRESH
        ]
        if grid.failure:
            found[name] = Freshness(State.FAILED, (grid.failure,))
        else:
            found[name] = Freshness(State.STALE if why else State.FRESH, tuple(why))
    return found


def reasons(
    grid: Grid,
    grids: Mapping[str, Grid],
    connection: duckdb.DuckDBPyConnection,
    functions: Mapping[str, Function],
    store_folder: Path,
    looked_at: dict[tuple[str, str], list[list[Any]]] | None = None,
) -> list[str]:
    """Why a grid is stale by itself, whatever the state of the grids it reads.

    Parameters
    ----------
    grid : Grid
        The grid.
    grids, connection, functions, store_folder
        As for `freshness_of_all`.
    looked_at : dict, optional
        What was found behind patterns already, to look once.
    """
    if grid.kind is GridKind.ENTERED:
        return []
    seen = {} if looked_at is None else looked_at
    return [
        *_own_reasons(grid, grids, functions),
        *_changed_files(grid, connection, store_folder, seen),
    ]


def in_order(grids: Mapping[str, Grid], names: Collection[str] | None = None) -> list[str]:
    """Folded names, each after the grids it reads: of all grids, or some and all they rest on."""
    order: list[str] = []
    done: set[str] = set()
    for start in grids if names is None else names:
        waiting = [(start, False)]
        while waiting:
            name, is_ready = waiting.pop()
            if is_ready:
                order.append(name)
            elif name not in done:
                done.add(name)
                waiting.append((name, True))
                reads = (other.casefold() for other in grids[name].reads)
                waiting += [(other, False) for other in reads if other in grids]
    return order


def _own_reasons(
    grid: Grid, grids: Mapping[str, Grid], functions: Mapping[str, Function]
) -> list[str]:
    if grid.version == 0:
        return ["it has not been computed yet"]
    why = []
    for name, stamp in sorted(grid.record.grids.items()):
        other = grids.get(name)
        if other is None:
            why.append(f"{name} is gone")
        elif other.stamp != stamp:
            why.append(f"{other.name} changed at {clock(other.changed)}")
    for name, version in sorted(grid.record.functions.items()):
        function = functions.get(name)
        if function is None:
            why.append(f"{name} is no longer a function")
        elif function.version != version:
            why.append(f"{name} is a newer version")
    return why


def _changed_files(
    grid: Grid,
    connection: duckdb.DuckDBPyConnection,
    store_folder: Path,
    looked_at: dict[tuple[str, str], list[list[Any]]],
) -> list[str]:
    """Which files behind a grid are new, gone or changed."""
    folder = Path(os.path.normpath(store_folder / grid.folder))
    why = []
    for pattern, before in grid.record.files.items():
        place = (str(folder), pattern)
        if place not in looked_at:
            looked_at[place] = _look(folder, pattern, connection)
        old = {state[0]: state[1:] for state in before}
        new = {state[0]: state[1:] for state in looked_at[place]}
        moved = _moved(old, new)
        for path in sorted(new.keys() - old.keys()):
            if path not in moved.values():
                why.append(f"{shown(path, folder)} is new")
        for path in sorted(old.keys() - new.keys()):
            if path not in moved:
                why.append(f"{shown(path, folder)} is gone")
        for path in sorted(old.keys() & new.keys()):
            if old[path] != new[path]:
                why.append(f"{shown(path, folder)} has changed")
    return why


def _look(folder: Path, pattern: str, connection: duckdb.DuckDBPyConnection) -> list[list[Any]]:
    with contextlib.ExitStack() as stack:
        if not os.path.isabs(pattern):  # noqa: PTH117
            try:
                stack.enter_context(contextlib.chdir(folder))
            except OSError:
                return []
        found = match(pattern, connection).files
        return [[f.path, f.size, f.mtime_ns, f.ctime_ns, f.inode] for f in found]


def _content(state: list[Any]) -> tuple[Any, ...]:
    """What tells a changed file from one that was only copied, with its times, elsewhere."""
    size, mtime, *_ = state
    return size, mtime


def _moved(old: dict[str, list[Any]], new: dict[str, list[Any]]) -> dict[str, str]:
    """Files found under another folder with the same name, size and time: the data were moved."""
    by_name = {
        (os.path.basename(path), *_content(state)): path  # noqa: PTH119
        for path, state in new.items()
        if path not in old
    }
    moved = {}
    for path, state in old.items():
        if path not in new:
            there = by_name.get((os.path.basename(path), *_content(state)))  # noqa: PTH119
            if there is not None:
                moved[path] = there
    return moved


def shown(path: str, folder: Path) -> str:
    """A path as the user would write it."""
    with contextlib.suppress(ValueError):
        return str(Path(path).relative_to(folder))
    return path


def clock(moment: datetime | None) -> str:
    """A moment in the user's own time: today the hour, else the day too."""
    if moment is None:
        return "some time"
    local = moment.astimezone()
    is_today = local.date() == datetime.now().astimezone().date()
    return local.strftime("%H:%M" if is_today else "%Y-%m-%d %H:%M")
