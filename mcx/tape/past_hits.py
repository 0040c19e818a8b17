"""Hits of the past: on which day of its watch a flag turned, as far as fixings and statements tell, and what is owed.

A statement that a flag held says that it turned by then, one that it did not says that it turned later. Between the two
may lie more days than one: then the day is not known, which does no harm where what is still owed is the same on each
of them, and where nothing that counts happens between them.
"""

from __future__ import annotations

import datetime
from collections.abc import Collection, Iterable, Iterator
from dataclasses import dataclass, replace

from mcx.checked.formula import Name
from mcx.checked.payoff import Action, Assign, End, Event, Pay
from mcx.dates.dated_contract import DatedContract, DatedHit, Day
from mcx.tape.builder import Builder
from mcx.tape.formulas import Scene, Unreadable, Values
from mcx.tape.hits import Due, Span, paid_at
from mcx.tape.program import Leaf, LeafKind
from mcx.tape.running import Watched

WHICH_DAY = ("'{0}' came true after {1} and by {2}, and what is owed hangs on the day; say it, as "
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

    def event(self, dated: DatedContract) -> Event:
        """What is still to be carried out: without amounts that are paid, whose date is not known. Raises Unreadable
        where what is owed may hang on the day."""
        dues = {pay: {due[k] for k in self.days} for pay, due in self.hit.due.items()}
        unsure = {pay for pay, days in dues.items() if len(days) > 1}
        if any(_owed(dues[pay]) for pay in unsure) or self._matters_when(dated, any(map(_owed, dues.values()))):
            raise self.which_day(dated)
        event = self.hit.event
        return replace(event, then=_without(unsure, event.then), otherwise=_without(unsure, event.otherwise))

    def _matters_when(self, dated: DatedContract, owes: bool) -> bool:
        """Whether something on dates between the days counts otherwise before the hit than after it."""
        between = [moment for moment in dated.moments if self.first.time <= moment.day.time < self.last.time]
        events = [each for moment in between for each in moment.events]
        lasting, ends = (any(isinstance(action, kind) for action in _actions(self.hit.event)) for kind in (Assign, End))
        changed = any(isinstance(action, (Assign, End)) for each in events for action in _actions(each.event))
        return bool(lasting and between or ends and any(_owed(each.due.values()) for each in events)
                    or owes and changed)

    def which_day(self, dated: DatedContract) -> Unreadable:
        """That the day is asked for, where the statement stands that leaves it open."""
        name = self.hit.watch.running.name
        stated = dated.contract.happened.get(name, {})
        place = next((known.place for known in stated.values()), dated.contract.place)
        return Unreadable(place, WHICH_DAY.format(name, self.first.date - EVE, self.last, self.last.date - EVE))

    def due(self, pay: Pay, builder: Builder) -> Due:
        """When an amount is paid, whichever of the days it was."""
        day = self.hit.due[pay][self.days[-1]]
        return Due(builder.leaf(Leaf(LeafKind.DISCOUNT, end=day.time)), builder.constant(day.time), day, (day.time,))

    def ends(self, dated: DatedContract, builder: Builder) -> int:
        """The time to which a contract has lived that ended there, as `Hits.ends`."""
        due = [hit.due[pay][self.days[-1]].time for hit, pay in paid_at(dated.hits, self.hit)]
        return builder.constant(max(due or [self.last.time]))

    def scene(self, builder: Builder, dated: DatedContract) -> Scene:
        """What may be read there: terms, and `years` where the day is known."""
        def years() -> int:
            if len(self.days) > 1:
                raise self.which_day(dated)
            return builder.constant(self.last.time - dated.start.time)

        return Scene(_unread, _unread, moment=years)


def past_hit(hit: DatedHit, state: Watched) -> PastHit | None:
    """The hit, if it came by the valuation date."""
    turned = state.turned() if hit.watch.start.time < 0.0 else None
    if turned is None:
        return None
    since, until = turned
    days = tuple(number for number, day in enumerate(hit.days)
                 if (since is None or day.date > since) and day.date <= until)
    return PastHit(hit, days) if days else None


def _owed(days: Iterable[Day]) -> bool:
    """Whether one of the days is not past."""
    return any(day.time >= 0.0 for day in days)


def _actions(event: Event) -> Iterator[Action]:
    yield from event.then
    yield from event.otherwise


def _without(pays: Collection[Pay], actions: Iterable[Action]) -> tuple[Action, ...]:
    return tuple(action for action in actions if not (isinstance(action, Pay) and action in pays))


def _unread(asked: Name) -> Values:
    raise Unreadable(asked.place, NOT_READ.format(asked.name))
