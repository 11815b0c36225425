"""Results laid out for a screen of a given width.

A table that is too wide wraps its texts and headers, is turned on its side when it has few rows,
or else is cut into bands that repeat the leading columns. A long one keeps its first and last rows.
"""

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from rich.cells import cell_len
from rich.console import Console
from rich.text import Text

from midspread.cli.cells import Column, columns_of
from midspread.cli.numbers import count_text
from midspread.cli.wrapping import header_lines, longest, wrapped

if TYPE_CHECKING:
    import pyarrow as pa

MOST_ROWS = 40
# Of the rows of a cut table, as many stand at its end.
LAST_ROWS = 10
GAP = 2
INDENT = 2
WIDEST_TEXT = 60
NARROWEST_TEXT = 16
# Shorter headers are not broken: that would read badly and gain little.
NARROWEST_HEADER = 8
HEAD, RULE, FAINT = "bold cyan", "cyan", "dim"


@dataclass(frozen=True)
class Excerpt:
    """The rows of a table that are shown.

    Attributes
    ----------
    columns : list of Column
        Texts of the rows shown.
    rows : int
        Rows of the whole table.
    shown : int
        Rows shown.
    gap_after : int
        After how many rows some are left out; 0 where none are.
    """

    columns: list[Column]
    rows: int
    shown: int
    gap_after: int = 0

    @property
    def note(self) -> str:
        """How many rows there are, and how many of them were left out."""
        note = count_text(self.rows, "row")
        if self.gap_after:
            note += f", {count_text(self.rows - self.shown, 'row')} in between not shown"
        return note


def excerpt(table: "pa.Table", most_rows: int = MOST_ROWS) -> Excerpt:
    """The rows to show: all, or the first and the last where there are more than `most_rows`.

    Parameters
    ----------
    table : pyarrow.Table
        The result.
    most_rows : int
        How many rows at most; 0 shows all.

    Returns
    -------
    Excerpt
        Their texts.
    """
    rows = table.num_rows
    if most_rows == 0 or rows <= most_rows:
        return Excerpt(columns_of(table), rows, rows)
    import pyarrow as pa

    last = min(LAST_ROWS, most_rows // 4)
    first = most_rows - last
    kept = pa.concat_tables([table.slice(0, first), table.slice(rows - last)])
    return Excerpt(columns_of(kept), rows, most_rows, gap_after=first)


def print_table(
    console: Console,
    table: "pa.Table",
    most_rows: int = MOST_ROWS,
    *,
    note: str | None = None,
    remark: str = "",
) -> None:
    """Print a result, and below it the number of its rows or another note, then a remark."""
    part = excerpt(table, most_rows)
    print_lines(console, laid_out(part, console.width))
    print_lines(console, [Text((note or part.note) + remark, style=FAINT)])


def print_lines(console: Console, lines: Iterable[Text]) -> None:
    """Print lines as they are, indented; none is wrapped again."""
    for line in lines:
        text = Text(" " * INDENT) + line if line.plain else line
        console.print(text, soft_wrap=True)


def laid_out(part: Excerpt, width: int) -> list[Text]:
    """The lines of a table that fit a width."""
    room = max(width - INDENT, NARROWEST_TEXT)
    columns = part.columns
    if not columns:
        return []
    natural = [max(cell_len(c.name), _cell_width(c)) for c in columns]
    for widths in (natural, _narrowed(columns, natural, room), _header_wrapped(columns, room)):
        if _total(widths) <= room:
            return _grid(part, columns, widths)
    return _on_its_side(part, room) or _bands(part, widths, room)


def _cell_width(column: Column) -> int:
    return max(1, longest(line for cell in column.cells for line in cell.split("\n")))


def _total(widths: Sequence[int]) -> int:
    return sum(widths) + GAP * (len(widths) - 1)


def _narrowed(columns: Sequence[Column], widths: Sequence[int], room: int) -> list[int]:
    """Widths with the widest texts made narrower, which wrap then, until all fit."""
    narrow = list(widths)
    for most in range(WIDEST_TEXT, NARROWEST_TEXT - 1, -1):
        if _total(narrow) <= room:
            break
        narrow = [
            w if column.is_number else min(w, max(most, cell_len(column.name)))
            for w, column in zip(narrow, columns, strict=True)
        ]
    return narrow


def _header_wrapped(columns: Sequence[Column], room: int) -> list[int]:
    """Widths with headers broken at the ends of their words as well."""
    widths = [
        max(_cell_width(column), longest(header_lines(column.name, NARROWEST_HEADER)))
        for column in columns
    ]
    return _narrowed(columns, widths, room)


def _grid(part: Excerpt, columns: Sequence[Column], widths: Sequence[int]) -> list[Text]:
    headers = [header_lines(c.name, w) for c, w in zip(columns, widths, strict=True)]
    height = max(len(header) for header in headers)
    lines = []
    for i in range(height):
        texts = [header[i - height] if i >= height - len(header) else "" for header in headers]
        lines.append(_line(columns, widths, texts, lambda _column: HEAD))
    lines.append(_line(columns, widths, ["─" * width for width in widths], lambda _column: RULE))
    for row in range(part.shown):
        if part.gap_after and row == part.gap_after:
            lines.append(_line(columns, widths, ["⋮" for _ in columns], lambda _column: FAINT))
        lines += _row(columns, widths, row)
    return lines


def _row(columns: Sequence[Column], widths: Sequence[int], row: int) -> list[Text]:
    cells = [wrapped(c.cells[row], w) for c, w in zip(columns, widths, strict=True)]
    return [
        _line(
            columns,
            widths,
            [cell[i] if i < len(cell) else "" for cell in cells],
            lambda column: FAINT if row in column.nulls else "",
        )
        for i in range(max(len(cell) for cell in cells))
    ]


def _line(
    columns: Sequence[Column],
    widths: Sequence[int],
    texts: Sequence[str],
    style: Callable[[Column], str],
) -> Text:
    line = Text()
    for column, width, text in zip(columns, widths, texts, strict=True):
        padding = " " * (width - cell_len(text))
        if column.is_number:
            line.append(padding)
        line.append(text, style=style(column))
        line.append(" " * GAP if column.is_number else padding + " " * GAP)
    line.rstrip()
    return line


def _on_its_side(part: Excerpt, room: int) -> list[Text]:
    """Columns as lines and rows side by side; nothing where that does not fit either."""
    if part.gap_after or part.shown == 0:
        return []
    names = longest(column.name for column in part.columns)
    widths = [
        max(1, longest(line for c in part.columns for line in c.cells[row].split("\n")))
        for row in range(part.shown)
    ]
    if part.shown == 1:
        widths = [min(widths[0], max(room - names - GAP, NARROWEST_TEXT))]
    elif _total([names, *widths]) > room:
        return []
    lines: list[Text] = []
    for column in part.columns:
        cells = [wrapped(column.cells[row], widths[row]) for row in range(part.shown)]
        for i in range(max(len(cell) for cell in cells)):
            line = Text((column.name if i == 0 else "").ljust(names + GAP), style=HEAD)
            for row, cell in enumerate(cells):
                text = cell[i] if i < len(cell) else ""
                padding = " " * (widths[row] - cell_len(text))
                line.append(
                    text + padding if part.shown == 1 else padding + text,
                    style=FAINT if row in column.nulls else "not bold default",
                )
                line.append(" " * GAP)
            line.rstrip()
            lines.append(line)
    return lines


def _bands(part: Excerpt, widths: Sequence[int], room: int) -> list[Text]:
    """Stacked tables, each with the leading columns that tell the rows apart."""
    columns = part.columns
    keys = _key_count(columns, widths, room)
    lines: list[Text] = []
    start = keys
    while start < len(columns):
        stop = start + 1
        while stop < len(columns) and _total([*widths[:keys], *widths[start : stop + 1]]) <= room:
            stop += 1
        chosen = [*range(keys), *range(start, stop)]
        shares = [widths[i] for i in chosen]
        if _total(shares) > room:  # one column alone is wider than what the keys leave
            shares[-1] = room - (_total(shares[:-1]) + GAP if keys else 0)
        if lines:
            lines.append(Text())
        lines += _grid(part, [columns[i] for i in chosen], shares)
        start = stop
    return lines


def _key_count(columns: Sequence[Column], widths: Sequence[int], room: int) -> int:
    """How many leading columns every band repeats: names, dates or a number of the row."""
    most = min(room // 2, room - GAP - NARROWEST_TEXT)
    count = 0
    for column in columns[: min(3, len(columns) - 1)]:
        is_key = not column.is_measure and (count == 0 or not column.is_number)
        if not is_key or _total(widths[: count + 1]) > most:
            break
        count += 1
    return count
