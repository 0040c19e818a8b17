"""Fixings: levels of the past, by asset (or rate of exchange) and date, in the market document or in a CSV file that it
names.

    fixings:                                          fixings: levels.csv
      harbour: {2026-11-16: 4210.50}                  date,harbour,lantern
      EUR per USD: {2026-11-16: 0.91}                 2026-11-16,4210.50,812.40
"""

from __future__ import annotations

import datetime
from collections.abc import Iterable
from pathlib import Path

from mcx.checked.reading import offered
from mcx.checked.values import amount
from mcx.faults import Fault, Place
from mcx.text.located import Document, Mapping, Node, Scalar
from mcx.text.scalars import date, expected
from mcx.text.tables import read_table

Fixings = dict[str, dict[datetime.date, float]]
SHAPE = "levels by asset and date, as '{harbour: {2026-11-16: 4210.50}}', or the name of a CSV file"


def file_of(market: Document) -> str:
    """The name of the CSV file that a market takes its fixings from, seen from where the market's own file is; ''
    where it names none."""
    node = market.body.get("fixings")
    if not isinstance(node, Scalar) or node.absent or not node.text.lower().endswith(".csv"):
        return ""
    return node.text if market.file == "-" else str(Path(market.file).parent / node.text)


def read_fixings(node: Node | None, table: Document | None, names: Iterable[str], faults: list[Fault]) -> Fixings:
    """The fixings of a market document; `table` is the CSV file that it names, `names` are its assets and rates."""
    reader = _Reader(tuple(names), faults)
    if isinstance(node, Mapping):
        for name, levels in node.entries:
            if not reader.is_known(name):
                continue
            if not isinstance(levels, Mapping):
                faults.append(expected("levels by date, as '{2026-11-16: 4210.50}'", levels))
                continue
            for day, level in levels.entries:
                reader.add(name.text, day, level)
    elif table is not None:
        reader.table(table)
    elif node is not None and not (isinstance(node, Scalar) and node.text.lower().endswith(".csv")):
        faults.append(expected(SHAPE, node))
    return reader.found


class _Reader:
    """Collects levels and faults."""

    def __init__(self, names: tuple[str, ...], faults: list[Fault]):
        self.names, self.faults = names, faults
        self.found: Fixings = {}

    def is_known(self, name: Scalar) -> bool:
        if name.text in self.names:
            return True
        self.faults.append(Fault(name.place, f"'{name.text}' is no asset and no rate of exchange of the market"
                                             f"{offered(name.text, self.names)}"))
        return False

    def add(self, name: str, day: Scalar, level: Node) -> None:
        when, value = date(day), amount(level)
        wrong = [each for each in (when, value) if isinstance(each, Fault)]
        levels = self.found.setdefault(name, {})
        if not wrong and when in levels:
            wrong = [Fault(day.place, f"a second fixing of '{name}' on {when}")]
        self.faults += wrong
        if not wrong:
            levels[when] = value

    def table(self, table: Document) -> None:
        rows, wrong = read_table(table.text, table.file)
        self.faults += wrong
        head = rows[0] if rows else []
        if len(head) < 2 or head[0].text != "date":
            self.faults.append(Fault(Place(table.file, 1, 1), "expected a first line 'date,' and names of assets, as "
                                                              f"'date,{','.join(self.names)}'"))
            return
        columns: dict[str, int] = {}
        for number, name in enumerate(head[1:], start=1):
            if name.text in columns:
                self.faults.append(Fault(name.place, f"a second column of '{name.text}'"))
            elif self.is_known(name):
                columns[name.text] = number
        for cells in rows[1:]:
            for name, number in columns.items():
                if cells[number].text:
                    self.add(name, cells[0], cells[number])
