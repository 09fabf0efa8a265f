"""A sheet of plain text: headings, sentences, lists and tables that fit a terminal or a log file."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from io import StringIO
from itertools import islice
from typing import Literal

from rich.box import Box
from rich.console import Console
from rich.table import Table
from rich.text import Text

from allocator.report.words import clean

LOG_WIDTH = 80
PROSE_WIDTH = 100
MOST_ROWS = 200
MOST_BULLETS = 20
# Only a line of dashes below the header: the same in every encoding, on every terminal and in every log.
_BOX = Box("    \n    \n -  \n    \n    \n    \n    \n    \n", ascii=True)


@dataclass(frozen=True)
class Column:
    """A column's header (a line break in it starts a second line) and the side its cells are aligned to."""

    header: str
    justify: Literal["left", "right"] = "right"


def columns(words: Sequence[str], figures: Sequence[str]) -> list[Column]:
    """Columns of words, to the left, then columns of figures, to the right."""
    return [*(Column(header, "left") for header in words), *(Column(header) for header in figures)]


class Paper:
    """Collects text of at most `width` columns; knows nothing of what it writes."""

    def __init__(self, width: int = LOG_WIDTH):
        self._buffer = StringIO()
        # No colour and no markup: names in brackets stay names, and a log file stays readable.
        self._console = Console(
            file=self._buffer,
            width=width,
            color_system=None,
            force_terminal=False,
            force_jupyter=False,  # In a notebook too this writes to its own sheet, not to the cell.
            legacy_windows=False,
            markup=False,
            highlight=False,
            emoji=False,
        )
        self._prose = min(width, PROSE_WIDTH)

    def text(self) -> str:
        lines = (line.rstrip() for line in self._buffer.getvalue().strip("\n").split("\n"))
        return "\n".join(lines) + "\n"

    def heading(self, text: str) -> None:
        self._console.print()
        self.say(text)

    def say(self, text: str) -> None:
        self._console.print(Text(clean(text), overflow="fold"), width=self._prose)

    def verbatim(self, text: str) -> None:
        """Print a line to be copied, whole even where it is wider than the paper."""
        self._console.print(Text(clean(text)), soft_wrap=True)

    def bullets(self, items: Sequence[str], most: int = MOST_BULLETS) -> None:
        grid = Table.grid(padding=(0, 1, 0, 0))
        grid.add_column(width=1)
        grid.add_column(overflow="fold")
        for item in items[:most]:
            grid.add_row("-", Text(clean(item)))
        self._console.print(grid, width=self._prose)
        self._count_rest(len(items), most, "lines", "--json")

    def table(self, columns: Sequence[Column], rows: Iterable[Sequence[str]], size: int, most: int = MOST_ROWS) -> None:
        """Print the first `most` of `size` rows; the rest is counted, never dropped in silence."""
        table = Table(box=_BOX, show_edge=False, pad_edge=False, padding=(0, 1, 0, 0), header_style="")
        for column in columns:
            table.add_column(Text(column.header), justify=column.justify, overflow="fold", vertical="top")
        for row in islice(rows, most):
            table.add_row(*(Text(clean(cell)) for cell in row))
        self._console.print(table)
        self._count_rest(size, most, "rows", "--csv")

    def _count_rest(self, size: int, most: int, what: str, option: str) -> None:
        if size > most:
            self.say(f"... and {size - most:,} more {what} ({option} gives all)")
