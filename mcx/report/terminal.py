"""What all terminal views share: the console, headings, tables and paragraphs. Plain text in a pipe, 80 columns."""

from __future__ import annotations

import math
import re
import sys
from collections.abc import Iterable, Sequence

from rich.cells import cell_len
from rich.console import Console
from rich.padding import Padding
from rich.table import Table
from rich.text import Text

NUMBER = "right"
MOST_DECIMALS = 10
INDENT, GAP = 2, 2  # columns before a table and between its columns


class Page:
    """A view that grows from top to bottom and is written to standard output whole, without spaces at line ends."""

    def __init__(self) -> None:
        self.console = Console(highlight=False, markup=False, emoji=False)
        self._capture = self.console.capture()
        self._capture.__enter__()

    def write(self) -> None:
        """Writes the page; nothing can be added after that."""
        self._capture.__exit__(None, None, None)
        sys.stdout.write(re.sub(" +$", "", self._capture.get(), flags=re.MULTILINE))
        sys.stdout.flush()  # whatever is wrong with the reader shows now, not when the process ends

    def heading(self, text: str) -> None:
        self.console.print()
        self.console.print(Text(text, style="bold"))

    def line(self, text: str = "", style: str = "") -> None:
        """A paragraph, wrapped at the width of the page."""
        self.console.print(Text(text, style=style))

    def items(self, texts: Iterable[str], sign: str = "-") -> None:
        """Paragraphs behind dashes, or behind another sign."""
        for text in texts:
            grid = Table.grid(padding=(0, 1))
            grid.add_row(sign, Text(text))
            self.console.print(grid)

    def named(self, pairs: Iterable[tuple[str, str]]) -> None:
        """Names with what is said of them."""
        grid = Table.grid(padding=(0, 2))
        grid.add_column(max_width=28, overflow="fold")
        grid.add_column()
        for name, text in pairs:
            grid.add_row(Text(name), Text(text))
        self.console.print(grid)

    def table(self, heads: Sequence[str], rows: Iterable[Sequence[str]], words: int = 1, last: int = 0) -> None:
        """A table whose first `words` columns and `last` columns hold words; the others hold numbers, aligned right.

        Where the page is too narrow words go below one another; a table that is still too wide stays as wide as it must
        be: no word and no number is ever broken or cut.
        """
        rows = [list(row) for row in rows]
        page = self.console.width
        kinds = [number < words or number >= len(heads) - last for number in range(len(heads))]
        widths = _widths([list(column) for column in zip(heads, *rows, strict=True)], kinds, page)
        table = Table(box=None, pad_edge=False, padding=(0, GAP, 0, 0), header_style="bold")
        for head, width, worded in zip(heads, widths, kinds, strict=True):
            table.add_column(head, width=width, justify="left" if worded else NUMBER, overflow="fold")
        for row in rows:
            table.add_row(*map(Text, row))
        self.console.width = max(page, INDENT + sum(widths) + GAP * len(widths))
        self.console.print(Padding(table, (0, 0, 0, INDENT)))
        self.console.width = page


def _widths(columns: Sequence[Sequence[str]], words: Sequence[bool], page: int) -> list[int]:
    """The width of each column of cells: all of it where the page has room, else, of words, the longest word's and a
    fair share of what is left; a column of numbers has all it needs."""
    full = [max(map(cell_len, cells)) for cells in columns]
    least = [
        max(cell_len(word) for cell in cells for word in cell.split() or [""]) if worded else width
        for cells, worded, width in zip(columns, words, full, strict=True)
    ]
    room = page - INDENT - GAP * (len(columns) - 1) - sum(least)
    share = max(0.0, min(1.0, room / max(sum(full) - sum(least), 1)))
    return [low + int(share * (high - low)) for low, high in zip(least, full, strict=True)]


def decimals(error: float, digits: int, fewest: int) -> int:
    """How many decimals show `digits` significant digits of an error, at least `fewest`; 6 for an error of 0."""
    if not error > 0.0 or not math.isfinite(error):
        return max(fewest, 6 if digits > 1 else fewest)
    return min(max(digits - 1 - math.floor(math.log10(error)), fewest), MOST_DECIMALS)


def fixed(number: float, places: int, unit: str = "") -> str:
    """A number with thousands separated; never '-0.00'."""
    text = f"{number:,.{places}f}"
    if text.startswith("-") and not text.strip("-0.,"):
        text = text[1:]
    return f"{text} {unit}" if unit else text
