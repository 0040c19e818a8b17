"""Hits of the past: on which day of its watch a flag turned, as far as fixings and statements tell, and what is owed.

A statement that a flag held says that it turned by then, one that it did not says that it turned later. Between the two
may lie more days than one: then the day is not known, which does no harm once all that falls due on any of them is paid.
"""

from __future__ import annotations

import datetime
from collections.abc import Iterable
from dataclasses import dataclass, replace

from mcx.checked.contract import Contract
from mcx.checked.formula import Name
from mcx.checked.payoff import Action, Event, Pay
from mcx.dates.dated_contract import DatedHit, Day
from mcx.tape.builder import Builder
from mcx.tape.formulas import Scene, Unreadable, Values
from mcx.tape.hits import Due, Span
from mcx.tape.program import Leaf, LeafKind
from mcx.tape.running import Watched

WHICH_DAY = ("'{0}' came true after {1} and by {2}, and when its amounts are paid hangs on the day; say it, as "
             "'happened: {{{0}: {{{3}: false, {2}: true}}}}'")
NOT_READ = "'{}' is not read at a hit of the past"
EVE = datetime.timedelta(days=1)


@dataclass(frozen=True, slots=True)
class PastHit:
    """A hit that came on one of some days of its watch, in order."""

    hit: DatedHit
    days: tuple[int, ...]

    @property
    def first(self) -> Day:
        return self.hit.days[self.days[0]]

    @property
    def last(self) -> Day:
        return self.hit.days[self.days[-1]]

    @property
    def day(self) -> Day | Span:
        """Its day, or those between which it lies."""
        return self.last if len(self.days) == 1 else Span(self.first, self.last)

    def event(self, contract: Contract) -> Event:
        """What is still to be carried out: where the day is not known, without amounts that are paid. Raises Unreadable
        where one of these may be owed."""
        dues = [{due[k] for k in self.days} for due in self.hit.due.values()]
        unsure = [due for due in dues if len(due) > 1]
        if any(day.time >= 0.0 for due in unsure for day in due):
            name = self.hit.watch.running.name
            stated = contract.happened.get(name, {})
            place = next((known.place for known in stated.values()), contract.place)
            raise Unreadable(place, WHICH_DAY.format(name, self.first.date - EVE, self.last, self.last.date - EVE))
        event = self.hit.event
        return replace(event, then=_unpaid(event.then), otherwise=_unpaid(event.otherwise)) if unsure else event

    def due(self, pay: Pay, builder: Builder) -> Due:
        """When an amount is paid, whichever of the days it was."""
        day = self.hit.due[pay][self.days[-1]]
        return Due(builder.leaf(Leaf(LeafKind.DISCOUNT, end=day.time)), builder.constant(day.time), day, (day.time,))

    def scene(self, builder: Builder, start: Day) -> Scene:
        """What may be read there: terms, and `years` where the day is known."""
        known = len(self.days) == 1
        return Scene(_unread, _unread, moment=builder.constant(self.last.time - start.time) if known else None)


def past_hit(hit: DatedHit, state: Watched) -> PastHit | None:
    """The hit, if it came by the valuation date."""
    turned = state.turned() if hit.watch.start.time < 0.0 else None
    if turned is None:
        return None
    since, until = turned
    days = tuple(number for number, day in enumerate(hit.days)
                 if (since is None or day.date > since) and day.date <= until)
    return PastHit(hit, days) if days else None


def _unpaid(actions: Iterable[Action]) -> tuple[Action, ...]:
    return tuple(action for action in actions if not isinstance(action, Pay))


def _unread(asked: Name) -> Values:
    raise Unreadable(asked.place, NOT_READ.format(asked.name))
