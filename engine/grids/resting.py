"""What a grid rests on, and what rests on it, as indented lines.

A grid that is reached on several ways has what lies behind it listed once.
"""

from collections.abc import Callable, Iterator, Mapping

from midspread.engine.grids.model import Grid, GridKind

_AS_ABOVE = ", as above"


def tree_below(grids: Mapping[str, Grid], name: str) -> Iterator[tuple[int, str]]:
    """What a grid rests on: grids and patterns of files, each with how deep it stands."""

    def below(grid: Grid) -> list[str]:
        return [other.casefold() for other in grid.reads]

    return _walk(grids, name, below, _files)


def tree_above(grids: Mapping[str, Grid], name: str) -> Iterator[tuple[int, str]]:
    """What rests on a grid, each with how deep it stands."""
    users: dict[str, list[str]] = {}
    for other in grids.values():
        for read in other.reads:
            users.setdefault(read.casefold(), []).append(other.folded)
    return _walk(grids, name, lambda grid: users.get(grid.folded, []), lambda _: [])


def _files(grid: Grid) -> list[str]:
    if grid.kind is not GridKind.DERIVED:
        return []
    return [
        f"{pattern} ({len(files)} file{'' if len(files) == 1 else 's'})"
        for pattern, files in sorted(grid.record.files.items())
    ]


def _walk(
    grids: Mapping[str, Grid],
    name: str,
    following: Callable[[Grid], list[str]],
    leaves: Callable[[Grid], list[str]],
) -> Iterator[tuple[int, str]]:
    """Walk depth first, without recursion: a chain may be long."""
    seen: set[str] = set()

    def entries(grid: Grid, depth: int) -> list[tuple[int, str, str]]:
        below = [(depth, other, "") for other in following(grid)]
        return [*below, *((depth, "", leaf) for leaf in leaves(grid))][::-1]

    waiting = entries(grids[name], 0)
    while waiting:
        depth, folded, leaf = waiting.pop()
        if leaf:
            yield depth, leaf
        elif folded not in grids:
            yield depth, f"{folded} (gone)"
        else:
            grid = grids[folded]
            further = entries(grid, depth + 1)
            is_repeated = folded in seen and bool(further)
            yield depth, f"{grid.name} ({grid.kind}{_AS_ABOVE if is_repeated else ''})"
            if folded not in seen:
                seen.add(folded)
                waiting += further
