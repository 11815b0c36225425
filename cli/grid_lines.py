"""Grids as `show` lists them: kind, rows, state and why."""

from typing import TYPE_CHECKING

from midspread.cli.cells import visible
from midspread.cli.numbers import count_text
from midspread.cli.options import Settings
from midspread.cli.screen import Screen

if TYPE_CHECKING:
    from rich.text import Text

MOST_REASONS = 3


def grid_lines(settings: Settings) -> "list[Text]":
    """A line for each grid of the store, and one for each reason why it is stale."""
    from rich.text import Text

    from midspread.cli.tables import FAINT
    from midspread.engine.grids.freshness import State
    from midspread.engine.grids.refreshing import look

    path = settings.store_path()
    if not path.exists():
        return [Text("none; midspread keep GRID SQL makes one")]
    with Screen() as screen, settings.session(screen, use_store=False) as session:
        grids, states = look(session, path)
    if not grids:
        return [Text("none; midspread keep GRID SQL makes one")]
    names = max(len(visible(grid.name)) for grid in grids.values())
    rows = max(len(count_text(grid.rows, "row")) for grid in grids.values())
    lines = []
    for folded, grid in grids.items():
        state = states[folded]
        line = Text(visible(grid.name).ljust(names + 2))
        line.append(f"{grid.kind:<9}{count_text(grid.rows, 'row').rjust(rows)}  ", style=FAINT)
        line.append(str(state.state), style="" if state.state is State.FRESH else "bold")
        why = [visible(reason) for reason in state.why]
        if len(why) > MOST_REASONS:
            why = [*why[:MOST_REASONS], f"and {len(why) - MOST_REASONS} more"]
        if why:
            line.append(f": {'; '.join(why)}")
        lines.append(line)
    return lines
