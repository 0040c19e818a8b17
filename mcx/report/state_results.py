"""The results about a contract that has lived for a while, and about what comes next; units as in `results.py`."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

from mcx.report.results import Owed, Payment, Result, Sentence


@dataclass(frozen=True, slots=True)
class Fixed(Result):
    """A level of the past as it counts in the contract: converted and adjusted."""

    date: str
    asset: str
    level: float


@dataclass(frozen=True, slots=True)
class StatedLine(Result):
    """What the contract states of a watch as of the close of a date, not computed: 'yes', 'no' or a level."""

    date: str
    what: str
    value: str


@dataclass(frozen=True, slots=True)
class PastLine(Result):
    """An event of the past, and whether it happened: 'yes', 'no', or "by today's level"."""

    date: str
    what: str
    happened: str


@dataclass(frozen=True, slots=True)
class Distance(Result):
    """How far today's level of an asset is from one at which a comparison turns: `level` and `today` as they count,
    `distance` as a part of today's level (-0.25: it must fall by a quarter). `date` is the next on which it is read."""

    what: str
    date: str
    asset: str
    level: float
    today: float
    distance: float


@dataclass(frozen=True, slots=True)
class StateView(Result):
    """What has become of a contract by the valuation date. `accrued` is in the unit of the price; `running` are values
    so far; `next` what comes next; `distances` of today's levels to those that matter. `not_followed` says why nothing but
    what was `stated` is known, and is empty otherwise."""

    valuation: str
    fixings: tuple[Fixed, ...]
    past: tuple[PastLine, ...]
    stated: tuple[StatedLine, ...]
    paid: tuple[Payment, ...]
    owed: tuple[Owed, ...]
    to_deliver: tuple[str, ...]
    accrued: float
    running: tuple[Sentence, ...]
    ended: str
    next: tuple[Sentence, ...]
    distances: tuple[Distance, ...]
    not_followed: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class CalendarLine(Result):
    """One thing to come: `kind` is 'fixing', 'decision' or 'payment'; `of` the assets, the event or the leg."""

    date: str
    contract: str
    kind: str
    of: str


@dataclass(frozen=True, slots=True)
class CalendarView(Result):
    """What comes next of several contracts, in order of time: `mcx readback --calendar`. `calendar_versions` are the
    lists of holidays that the dates depend on, with the version of their package."""

    MAIN: ClassVar[str] = "lines"
    lines: tuple[CalendarLine, ...]
    calendar_versions: tuple[str, ...]
