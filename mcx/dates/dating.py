"""From a contract to a dated contract: every observation and every payment on its day.

`date_contract` is the door. Which day a date term means is worked out in `rules.py`; here schedules become
occasions (with their numbers in the parent schedule), occasions become moments, and what only dates can show
is found at fault.
"""

from __future__ import annotations

import datetime
import math
from dataclasses import replace

from mcx.checked.contract import Contract, DayRef, Figures, LevelFixing, Stretch, place_of
from mcx.checked.market import Market
from mcx.checked.payoff import At, Continuous, Event, Pay, Payoff, Running
from mcx.checked.term_values import DATED_TYPES, NUMERIC
from mcx.dates.business_days import NotCovered, good_days
from mcx.dates.dated_contract import Day, DatedContract, DatedEvent, DatedHit, Moment, Occasion, Update, Watch
from mcx.dates.day_counts import ICMA, Regular, actual_365_fixed, year_fraction
from mcx.dates.history import NO_HISTORY, History, history_of, said, said_of_today
from mcx.dates.readable import readings
from mcx.dates.rules import TermDays, part_of
from mcx.faults import Fault, Place

WATCHABLE = ("lowest", "highest", "ever", "always")


def date_contract(
    contract: Contract, valuation: datetime.date | None, history: History = NO_HISTORY, otherwise: bool = False
) -> tuple[DatedContract | None, list[Fault]]:
    """The contract with every date known, and the faults that only dates can show.

    Times are years from `valuation`; without one, from the contract's start. Optional date terms that are not
    stated narrow nothing, and nothing happens at them. A contract at fault gives no dated one, but the faults of the
    dates that can be read in it. Of a contract read `otherwise`, statements that only its own reading needs are none.
    """
    good, faults = good_days(contract.calendar) if contract.calendar else (None, [])
    paying, more = good_days(contract.payment_calendar) if contract.payment_calendar else (good, [])
    faults += more
    if faults or not (contract.framed or contract.textbook):
        return None, faults
    base = None if contract.textbook else valuation or contract.start.date
    terms = TermDays(contract, base, good, paying, _payment_terms(contract.payoff))
    dated_terms = [term.name for term in contract.payoff.terms if term.type in DATED_TYPES
                   or isinstance(contract.terms.get(term.name), LevelFixing)]
    found = {name: terms.of_term(name) for name in dated_terms if name in contract.terms}
    schedules = {name: days for name, days in found.items() if days}
    unread = frozenset(name for name in dated_terms if name in contract.at_fault or found.get(name) == ())
    start = Day(0.0) if contract.textbook else terms.day(contract.start.date)
    dated, faults = _Dating(contract, valuation, schedules, unread, start, terms, history).dated(otherwise)
    faults += terms.faults + _wrong_lengths(contract, schedules)
    return (None if faults or contract.at_fault else dated), sorted(set(faults))


def date_on(contract: Contract, market: Market | None) -> tuple[DatedContract | None, list[Fault]]:
    """The contract with every date, seen from the market's valuation date and with the past that the market knows."""
    history, wrong = history_of(contract, market)
    dated, faults = date_contract(contract, market.valuation if market else None, history)
    return (None if wrong else dated), [*wrong, *faults]


def _payment_terms(payoff: Payoff) -> frozenset[str]:
    """The date terms that say when something is paid and nothing else."""
    pays = {action.due for event in payoff.events for action in (*event.then, *event.otherwise)
            if isinstance(action, Pay)}
    watches = [running.at for running in payoff.running if isinstance(running.at, Continuous)]
    looked = {event.at.name for event in payoff.events} | {end.name for at in watches for end in (at.start, at.end)}
    looked |= {running.at.name for running in payoff.running if isinstance(running.at, At)}
    looked |= {name for event in payoff.events for name in (event.since, event.until)}
    return frozenset(pays - looked)


def _wrong_lengths(contract: Contract, schedules: dict[str, tuple[Day, ...]]) -> list[Fault]:
    """Lists for each date of a schedule that do not have as many entries as the schedule has dates."""
    faults = []
    for term in contract.payoff.terms:
        value, schedule = contract.terms.get(term.name), schedules.get(term.per, ())
        if isinstance(value, Figures) and value.per_date:
            count, what = len(value.rows), "numbers"
        elif term.type == "dates" and term.per in contract.terms and value is not None:
            count, what = len(schedules.get(term.name, ())), "dates"
        else:
            continue
        if schedule and count and count != len(schedule):
            text = (f"'{term.name}' has {count} {what}; '{term.per}' has {len(schedule)} dates, "
                    f"{schedule[0]} to {schedule[-1]}")
            faults.append(Fault(value.place, text))
    return faults


def _positions(contract: Contract, schedules: dict[str, tuple[Day, ...]]) -> dict[Day, dict[str, int]]:
    """The terms of several dates that have a day among their dates, and where."""
    found: dict[Day, dict[str, int]] = {}
    for name, days in schedules.items():
        if not isinstance(contract.terms[name], DayRef | Stretch | LevelFixing):
            for k, day in enumerate(days):
                found.setdefault(day, {})[name] = k
    return found


class _Dating:
    """One contract on its way to a dated one; collects faults as it goes."""

    def __init__(self, contract: Contract, valuation: datetime.date | None,
                 schedules: dict[str, tuple[Day, ...]], unread: frozenset[str], start: Day, terms: TermDays,
                 history: History):
        self.history = history
        self.contract, self.payoff, self.valuation = contract, contract.payoff, valuation
        self.schedules, self.unread, self.start, self.terms = schedules, unread, start, terms
        self.good, self.paying = terms.observing, terms.paying
        self.positions = _positions(contract, schedules)
        self.faults: list[Fault] = []
        self.assumptions: list[str] = list(terms.notes)
        self.warnings: list[str] = []
        self.updates: dict[Day, list[Update]] = {}
        self.events: dict[Day, list[DatedEvent]] = {}
        self.watches: list[Watch] = []
        self.hits: list[DatedHit] = []
        self.unwatched = False  # whether a watch is at fault, so that its running value has no date

    def dated(self, otherwise: bool) -> tuple[DatedContract | None, list[Fault]]:
        self._refuse_dates_before_start()
        for running in self.payoff.running:
            self._observe(running)
        for event in self.payoff.events:
            self._happen(event)
        days = sorted({*self.updates, *self.events}, key=lambda day: day.time)
        if not self._can_be_read():
            return None, self.faults
        if not otherwise:
            self._refuse_needless_statements(days)
        if not days and not self.hits and not self.faults:
            self._fault(self.contract.place, "nothing is ever observed or paid: no event has a date")
        dated = DatedContract(
            contract=self.contract, valuation=self.valuation, start=self.start, schedules=self.schedules,
            moments=tuple(Moment(day, tuple(self.updates.get(day, ())), tuple(self.events.get(day, ())))
                          for day in days),
            watches=tuple(self.watches), calendar_version=self._calendar_version(),
            assumptions=(*self.contract.assumptions, *dict.fromkeys(self.assumptions),
                         *said(self.contract, self.history)),
            warnings=tuple(dict.fromkeys(self.warnings)), history=replace(self.history, eve=self._eve()),
            hits=tuple(self.hits), regular=self._regular())
        live, idle, faults = readings(dated)
        faults += self.faults
        return (None if faults else _only(dated, live, idle)), faults

    def _refuse_needless_statements(self, days: list[Day]) -> None:
        """Disrupted days on which nothing is observed, and statements about what is not watched all the time."""
        fixed = [day for name, found in self.schedules.items() for day in found
                 if isinstance(self.contract.terms[name], LevelFixing)]
        observed = {day.date for day in (*days, *fixed)}
        for asset, dates in self.contract.disruption.items():
            for date, known in dates.items():
                if date not in observed:
                    near = min(observed, key=lambda day: (abs((day - date).days), day), default=None)
                    hint = f"; the nearest observation is on {near}" if near else ""
                    self._fault(known.place, f"'{asset}' is not observed on {date}, so that no observation is moved"
                                             f"{hint}")
        watched = {watch.running.name for watch in self.watches}
        for name, dates in self.contract.happened.items():
            for known in dates.values():
                if name not in watched:
                    self._fault(known.place, f"'{name}' is not watched all the time in this contract: what happened "
                                             "follows from its fixings")

    def _can_be_read(self) -> bool:
        """Whether all that decides which formulas are read is known: every term but numbers that must be stated."""
        at_fault = [term for term in self.payoff.terms if term.name in self.contract.at_fault | self.unread]
        numbers = all(term.type in NUMERIC and not term.optional for term in at_fault)
        return self.contract.framed and bool(self.payoff.events) and not self.unwatched and numbers

    def _fault(self, place: Place, text: str) -> None:
        fault = Fault(place, text)
        if fault not in self.faults:
            self.faults.append(fault)

    def _calendar_version(self) -> str:
        """The lists of holidays that the dates depend on, with the version of the package."""
        found = [self.good.version] if self.good and self.good.version else []
        if self.contract.payment_calendar and self.paying.version:
            found.append(f"{self.paying.version} for payments")
        return "; ".join(found)

    def _refuse_dates_before_start(self) -> None:
        for name, days in self.schedules.items():
            if days[0].time < self.start.time and not isinstance(self.contract.terms[name], LevelFixing):
                self._fault(place_of(self.contract.terms[name], 0),
                            f"{days[0]} lies before the contract's start {self.start}")

    def _eve(self) -> datetime.date | None:
        """The good business day before the valuation date: the last whose close can be known."""
        if self.valuation is None or self.good is None:
            return None
        try:
            return self.good.back(self.valuation - datetime.timedelta(days=1))
        except NotCovered:
            return self.valuation

    def _observe(self, running: Running) -> None:
        """The days of a running value: updates on dates, or a continuous watch."""
        at = running.at
        if at is None:
            return
        if isinstance(at, Continuous):
            self._watch(running, *(self._end(end) for end in (at.start, at.end)), at.place)
            return
        value = self.contract.terms.get(at.name)
        if isinstance(value, Stretch):
            if at.name in self.unread:
                return
            if running.how not in WATCHABLE:
                text = (f"'{running.name}' is the {running.how} of what it observes and cannot be watched "
                        f"continuously; {', '.join(WATCHABLE)} can")
                self._fault(value.place, text)
                self.unwatched = True
            else:
                self._watch(running, *self.schedules[at.name], value.place)
            return
        for occasion in self._occasions(at):
            update = Update(running, occasion, first=occasion.earlier is None)
            self.updates.setdefault(occasion.day, []).append(update)

    def _watch(self, running: Running, start: Day | None, end: Day | None, place: Place) -> None:
        if start is None or end is None:  # an optional date that is not stated: nothing is watched
            return
        if end.time <= start.time:
            self._fault(place, f"the watch ends on {end}, not after its start on {start}")
            self.unwatched = True
        else:
            self.watches.append(Watch(running, start, end))

    def _end(self, at: At) -> Day | None:
        days = part_of(self.schedules.get(at.name, ()), at.part)
        return days[0] if days else None

    def _happen(self, event: Event) -> None:
        """The days of an event, and of every payment in it."""
        at = event.at
        if at.part == "once":
            watch = next((watch for watch in self.watches if watch.running.name == at.name), None)
            if watch is not None:
                self._hit(event, watch)
                return
            at = next(running.at for running in self.payoff.running if running.name == at.name)
            if isinstance(at, Continuous) or isinstance(self.contract.terms.get(at.name), Stretch):
                return  # one of its dates is not stated, or at fault
        occasions = self._occasions(at, event.since, event.until)
        if not occasions and event.at.name in self.schedules and not {event.since, event.until} & self.unread:
            dates = f"'{event.at.name}.{event.at.part}'" if event.at.part else f"'{event.at.name}'"
            dates += f" from '{event.since}'" if event.since else ""
            dates += f" until '{event.until}'" if event.until else ""
            self.warnings.append(f"'{event.name or 'the payment'}' never happens: no date of {dates}")
        pays = [action for action in (*event.then, *event.otherwise) if isinstance(action, Pay)]
        for occasion in occasions:
            due = {pay: self._due(pay, occasion) for pay in pays}
            self.events.setdefault(occasion.day, []).append(DatedEvent(event, occasion, due))

    def _hit(self, event: Event, watch: Watch) -> None:
        """What happens at the moment of a hit, with every day on which it may come and when its amounts are paid."""
        pays = [action for action in (*event.then, *event.otherwise) if isinstance(action, Pay)]
        if self.contract.textbook:
            fixed = {pay: self.schedules[pay.due][:1] for pay in pays if pay.due in self.schedules}
            for pay, (due,) in fixed.items():
                self._refuse_before(pay, watch.end, due)
            self.hits.append(DatedHit(event, watch, (), fixed))
            return
        length = (watch.end.date - watch.start.date).days
        days = tuple(self.terms.day(watch.start.date + datetime.timedelta(days=k)) for k in range(length + 1))
        due = {}
        for pay in pays:
            if pay.due == "same day" or pay.due in self.unread:
                due[pay] = days
            elif pay.due in self.schedules:
                self._refuse_before(pay, watch.end, self.schedules[pay.due][0])
                due[pay] = self.schedules[pay.due][:1] * len(days)
            else:
                due[pay] = tuple(self._after_lag(day) for day in days)
        self.hits.append(DatedHit(event, watch, days, due))

    def _refuse_before(self, pay: Pay, day: Day, due: Day) -> None:
        if due.time < day.time:
            self._fault(place_of(self.contract.terms[pay.due], 0),
                        f"the payment of what is watched until {day} falls due before, on {due}")

    def _occasions(self, at: At, since: str = "", until: str = "") -> list[Occasion]:
        """The dates of a schedule, or the part of them that is meant, numbered as in the whole schedule."""
        days = self.schedules.get(at.name, ())
        if {at.name, since, until} & self.unread:
            return []
        single = isinstance(self.contract.terms.get(at.name), DayRef)
        first = self.schedules[since][0].time if since in self.schedules else -math.inf
        last = self.schedules[until][0].time if until in self.schedules else math.inf
        found: list[Occasion] = []
        for k in part_of(range(len(days)), at.part):
            day = days[k]
            if not first <= day.time <= last:
                continue
            found.append(Occasion(
                day=day, schedule="" if single else at.name, nth=k + 1, n_dates=len(days),
                period=self._fraction(at.name, days[k - 1] if k else self.start, day, k, k == len(days) - 1),
                years=day.time - self.start.time if self.contract.textbook else _years(self.start, day),
                dates=self.positions.get(day, {}), earlier=found[-1].day if found else None))
        return found

    def _fraction(self, name: str, before: Day, day: Day, number: int, final: bool) -> float:
        """The year fraction of the period that ends on `day`, the `number`-th date of a term, from 0; nan where it
        is not known."""
        if self.contract.textbook:
            return day.time - before.time
        if self.contract.day_count == ICMA:
            return self._regular_fraction(name, number)
        if not self.contract.day_count:
            return math.nan
        return year_fraction(self.contract.day_count, before.date, day.date, final=final)

    def _regular_fraction(self, name: str, number: int) -> float:
        """By Actual/Actual (ICMA) periods are measured between the dates of the rule before they roll: a regular one
        is always the same part of a year, the first may be short or long."""
        found = self.terms.regular(name)
        if found is None:
            return math.nan
        regular, skipped = found
        if number:
            return regular.months / 12
        return year_fraction(ICMA, self.contract.start.date, regular.step(skipped), regular=regular)

    def _regular(self) -> dict[str, tuple[Regular, int]]:
        """The regular periods of every schedule that has them, where days are counted by them."""
        if self.contract.day_count != ICMA:
            return {}
        return {name: found for name in self.schedules if (found := self.terms.regular(name))}

    def _due(self, pay: Pay, occasion: Occasion) -> Day:
        """When an amount is paid."""
        day = occasion.day
        if pay.due == "same day":
            return day
        if pay.due in self.unread:
            return day
        if pay.due not in self.schedules:
            return self._after_lag(day)
        term = self.payoff.term(pay.due)
        position = 0 if term.type == "date" else occasion.dates.get(term.per)
        if position is None:
            self._fault(pay.place, f"'{pay.due}' has one date for each date of '{term.per}', and {day} is "
                                   "none of them")
            return day
        if position >= len(self.schedules[pay.due]):  # a list that is too short is the fault already
            return day
        due = self.schedules[pay.due][position]
        if self.paying is not None:
            due = self._rolled_payment(due, pay)
        if due.time < day.time:
            self._fault(place_of(self.contract.terms[pay.due], position),
                        f"the payment of what is observed on {day} falls due before, on {due}")
        return due

    def _after_lag(self, day: Day) -> Day:
        if self.contract.settlement is None:
            return day
        try:
            return self.terms.day(self.paying.add(day.date, self.contract.settlement.count))
        except NotCovered as beyond:
            self._fault((self.contract.payment_calendar or self.contract.calendar).place,
                        f"the payment of {day}: {beyond}")
            return day

    def _rolled_payment(self, day: Day, pay: Pay) -> Day:
        """A payment day that a term gives, good in the payment calendar."""
        try:
            return self.terms.day(self.paying.rolled(day.date))
        except NotCovered as beyond:
            self._fault(self.contract.terms[pay.due].place, str(beyond))
            return day


def _only(dated: DatedContract, live: frozenset[str], idle: frozenset[Place]) -> DatedContract:
    """Without the running values that nothing reads, which are not observed, and the hits that nothing happens at."""
    moments = []
    for moment in dated.moments:
        updates = tuple(update for update in moment.updates if update.running.name in live)
        events = tuple(each for each in moment.events if each.event.place not in idle)
        if updates or events:
            moments.append(replace(moment, updates=updates, events=events))
    watches = tuple(watch for watch in dated.watches if watch.running.name in live)
    on_today = any(moment.day.date and moment.day.date == dated.valuation for moment in moments)
    today = [said_of_today(dated.contract, dated.history, dated.valuation)] if on_today else []
    hits = tuple(hit for hit in dated.hits if hit.event.place not in idle)
    by_day = [f"a hit of '{hit.watch.running.name}' counts for the calendar day on which it comes, weekends and "
              f"holidays included; a day runs from one close to the next" for hit in hits if hit.due and hit.days]
    return replace(dated, moments=tuple(moments), watches=watches, hits=hits,
                   assumptions=(*dated.assumptions, *today, *dict.fromkeys(by_day)))


def _years(start: Day, day: Day) -> float:
    """Years between two dates, Actual/365 (Fixed)."""
    return actual_365_fixed(start.date, day.date)
