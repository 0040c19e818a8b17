"""A day: where a contract's dates and a market's times meet."""

from __future__ import annotations

import datetime
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Day:
    """A point in time: years from the valuation date (Actual/365 Fixed) and the date (None in textbook contracts)."""

    time: float
    date: datetime.date | None = None

    def __str__(self) -> str:
        return self.date.isoformat() if self.date else f"{self.time:.10g}y"
