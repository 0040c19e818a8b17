"""Levels given in a file, for running one path through a contract: YAML by asset and date, or CSV with a date column.

    harbour: {2026-12-01: 4180.2, 2027-02-16: 4101}        date,harbour,lantern
    lantern: {2026-12-01: 801.1, 2027-02-16: 820}          2026-12-01,4180.2,801.1

Textbook contracts write times, `0.25y`, in place of dates.
"""

from __future__ import annotations

import datetime
from collections.abc import Callable

from mcx.checked.values import amount
from mcx.dates.dated_contract import DatedContract, Day
from mcx.faults import Fault, Place, did_you_mean
from mcx.text.located import Mapping, Node, Scalar
from mcx.text.scalars import date, expected, time
from mcx.text.source import decoded
from mcx.text.tables import read_table
from mcx.text.yaml12 import read_yaml

Levels = dict[str, dict[Day, float]]
SHAPE = "levels by asset and date, as 'harbour: {2026-12-01: 4180.2}'"


def read_levels(data: bytes, file: str, dated: DatedContract) -> tuple[Levels, list[Fault]]:
    """The levels of a file by asset and day, and everything wrong with it."""
    reader = _Reader(dated)
    if file.lower().endswith(".csv"):
        reader.csv(data, file)
    else:
        reader.yaml(data, file)
    return reader.levels, sorted(reader.faults)


class _Reader:
    """Collects levels and faults."""

    def __init__(self, dated: DatedContract):
        contract = dated.contract
        self.assets, self.textbook = contract.assets, contract.textbook
        self.base = dated.valuation or (contract.start.date if contract.start else None)
        self.levels: Levels = {asset: {} for asset in self.assets}
        self.faults: list[Fault] = []

    def yaml(self, data: bytes, file: str) -> None:
        if not data.strip():
            self.faults.append(Fault(Place(file, 1, 1), f"the file is empty; expected {SHAPE}"))
            return
        nodes, self.faults = read_yaml(data, file)
        for node in nodes:
            if not isinstance(node, Mapping):
                self.faults.append(expected(SHAPE, node))
                continue
            for name, dates in node.entries:
                if not self._is_asset(name):
                    continue
                if not isinstance(dates, Mapping):
                    self.faults.append(expected("levels by date, as '{2026-12-01: 4180.2}'", dates))
                    continue
                for day, level in dates.entries:
                    self._add(name.text, day, level)

    def csv(self, data: bytes, file: str) -> None:
        text = decoded(data, file)
        if isinstance(text, Fault):
            self.faults.append(text)
            return
        rows, wrong = read_table(text, file)
        self.faults += wrong
        head = rows[0] if rows else []
        if len(head) < 2 or head[0].text != "date":
            self.faults.append(Fault(Place(file, 1, 1), "expected a first line 'date,' and the assets, as "
                                                        f"'date,{','.join(self.assets)}'"))
            return
        columns: dict[str, int] = {}
        for number, name in enumerate(head[1:], start=1):
            if name.text in columns:
                self.faults.append(Fault(name.place, f"a second column of '{name.text}'"))
            elif self._is_asset(name):
                columns[name.text] = number
        for cells in rows[1:]:
            for name, number in columns.items():
                if cells[number].text:
                    self._add(name, cells[0], cells[number])

    def _is_asset(self, name: Scalar) -> bool:
        if name.text in self.assets:
            return True
        near = did_you_mean(name.text, self.assets) or f"; expected {' or '.join(self.assets)}, with levels by date"
        self.faults.append(Fault(name.place, f"'{name.text}' is no asset of the contract{near}"))
        return False

    def _add(self, asset: str, day: Scalar, level: Node) -> None:
        read: Callable[[Node], datetime.date | float | Fault] = time if self.textbook else date
        when, value = read(day), amount(level)
        wrong = [found for found in (when, value) if isinstance(found, Fault)]
        if wrong:
            self.faults += wrong
            return
        known = Day(when) if self.textbook else Day((when - self.base).days / 365, when)
        if known in self.levels[asset]:
            self.faults.append(Fault(day.place, f"a second level of '{asset}' on {known}"))
        self.levels[asset][known] = value

