"""What a grid rests on, and what rests on it, as indented lines."""

from collections.abc import Iterator, Mapping

from midspread.engine.grids.model import Grid, GridKind


def tree_below(grids: Mapping[str, Grid], name: str, depth: int = 0) -> Iterator[tuple[int, str]]:
    """What a grid rests on: grids and patterns of files, each with how deep it stands."""
    grid = grids[name]
    for other in grid.reads:
        folded = other.casefold()
        if folded in grids:
            yield depth, f"{grids[folded].name} ({grids[folded].kind})"
            yield from tree_below(grids, folded, depth + 1)
        else:
            yield depth, f"{other} (gone)"
    if grid.kind is GridKind.DERIVED:
        for pattern, files in sorted(grid.record.files.items()):
            count = f"{len(files)} files" if len(files) != 1 else "1 file"
            yield depth, f"{pattern} ({count})"


def tree_above(grids: Mapping[str, Grid], name: str, depth: int = 0) -> Iterator[tuple[int, str]]:
    """What rests on a grid, each with how deep it stands."""
    for other in grids.values():
        if name in (one.casefold() for one in other.reads):
            yield depth, f"{other.name} ({other.kind})"
            yield from tree_above(grids, other.folded, depth + 1)
