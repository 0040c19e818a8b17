"""What formulas read on their dates: every name must have its value when it is asked for.

Since all dates are known, this is decided before anything is drawn. The walk below follows the moments in
order, knows which running values have begun and which are the same on every path (counts of days, say), and of
each conditional that the terms settle reads only the branch that is taken. What it finds is kept by reader (an
event or a running value), so that running values that nothing reads can be left out.
"""

from __future__ import annotations

import math
import operator
from collections.abc import Callable
from dataclasses import dataclass, field
from types import MappingProxyType

from mcx.checked.contract import Contract, Figures, Word, place_of
from mcx.checked.formula import (
    Binary,
    Call,
    ChoiceIs,
    Formula,
    Given,
    IfElse,
    Name,
    Number,
    OfAsset,
    Previous,
    Unary,
    children,
)
from mcx.checked.payoff import Action, Assign, At, Deliver, End, Event, Pay, Running
from mcx.dates.dated_contract import Day, DatedContract, DatedEvent, Occasion
from mcx.dates.day_counts import ICMA
from mcx.faults import Fault, Place

KNOWN_OF_DATE = ("nth", "n_dates", "years", "period")
SAME_OF_ONE = ("worst", "best", "mean", "any", "all")  # of one number for every asset: that number
ARITHMETIC: MappingProxyType[str, Callable[[float, float], float]] = MappingProxyType({
    "+": operator.add, "-": operator.sub, "*": operator.mul, "/": operator.truediv, "<": operator.lt,
    "<=": operator.le, ">": operator.gt, ">=": operator.ge, "==": operator.eq, "!=": operator.ne,
})
UNUSED_MATTERS = ("number", "percent", "level", "choice", "flag", "asset")


@dataclass(frozen=True, slots=True)
class Reading:
    """A running value read on a day, by a formula at a place; `schedule` names the dates term that gave the day."""

    day: Day
    schedule: str
    place: Place


@dataclass(slots=True)
class Seen:
    """What one event or running value read: names of terms, running values each with its last reading, and what was
    wrong, by name."""

    terms: set[str] = field(default_factory=set)
    running: dict[str, Reading] = field(default_factory=dict)
    wrong: dict[str, Fault] = field(default_factory=dict)

    def add(self, other: Seen) -> None:
        """All that another has seen; of readings of one value the later one."""
        self.terms |= other.terms
        self.wrong = other.wrong | self.wrong
        for name, reading in other.running.items():
            self.reads(name, reading)

    def reads(self, name: str, reading: Reading) -> None:
        if name not in self.running or reading.day.time >= self.running[name].day.time:
            self.running[name] = reading


def readings(dated: DatedContract) -> tuple[frozenset[str], list[Fault]]:
    """The running values that payments depend on, and the faults of reading: names without a value where
    they are read, divisions by 0, observations after the last reading, and optional terms that the contract states
    but nothing reads."""
    walk = _Walk(dated)
    walk.along()
    payoff = dated.contract.payoff
    live: set[str] = set()
    queue = [walk.seen[event.place] for event in payoff.events if event.place in walk.seen]
    counted = Seen()
    while queue:
        seen = queue.pop()
        counted.add(seen)
        for running in payoff.running:
            if running.name in seen.running and running.name not in live:
                live.add(running.name)
                queue += [walk.seen[running.place]] if running.place in walk.seen else []
    faults = list(counted.wrong.values()) or _never_read(dated.contract, counted.terms)
    begun = {name: reading for name, reading in counted.running.items() if name not in counted.wrong}
    faults += _seen_in_vain(dated.contract, begun, walk.observed)
    return frozenset(live), sorted(faults)


def _seen_in_vain(
    contract: Contract, read: dict[str, Reading], observed: dict[str, tuple[Day, At, int]]
) -> list[Fault]:
    """Running values that are observed after they were read last, on dates that the contract gave them alone: an
    average or a watch that runs past the payment is a slip of a date. A value that is read on some dates only of the
    schedule that it is observed on is the definition's own making."""
    faults = []
    for name, (day, at, position) in observed.items():
        reading = read.get(name)
        if reading is None or day.time <= reading.day.time or at.name == reading.schedule:
            continue
        text = (f"'{name}' is observed until {day}, but read for the last time on {reading.day} ({reading.place}); "
                f"expected no date of '{at.name}' after that")
        faults.append(Fault(place_of(contract.terms[at.name], position), text))
    return faults


def _never_read(contract: Contract, read: set[str]) -> list[Fault]:
    """Optional terms that the contract states, although with its other terms they do not count."""
    names = [term.name for term in contract.payoff.terms
             if term.optional and term.type in UNUSED_MATTERS and term.name in contract.terms]
    text = f"is stated, but with these terms '{contract.payoff.name}' never reads it"
    return [Fault(contract.terms[name].place, f"'{name}' {text}") for name in names if name not in read]


class _Walk:
    """A walk along the moments with what is known on every path; `ready` holds the running values that
    have begun."""

    def __init__(self, dated: DatedContract):
        self.dated, self.contract = dated, dated.contract
        payoff = self.contract.payoff
        self.lets = {let.name: let.formula for let in payoff.lets}
        self.running = {running.name: running for running in payoff.running}
        self.order = {name: k for k, name in enumerate(self.running)}
        self.terms = {term.name: term for term in payoff.terms}
        self.ready = {running.name for running in payoff.running if running.start is not None}
        self.known: dict[str, float] = {}  # running values that are the same on every path
        self.observed: dict[str, tuple[Day, At, int]] = {}  # the last date of each, by which term, where in its value
        self.seen: dict[Place, Seen] = {}
        self.remembered: dict[tuple[Place, Place], Seen] = {}  # what each `previous` read on the date before
        self.occasion: Occasion | None = None
        self.owner = Seen()
        self.owner_place: Place | None = None

    def along(self) -> None:
        for running in self.running.values():
            if running.start is not None:
                self._look(running, None)
                value = self._read(running.start)
                self._learn(running.name, value if running.how in ("set", "total") else None)
            elif running.how == "total":
                self.known[running.name] = 0.0
        for watch in self.dated.watches:
            self._look(watch.running, None)
            self._read(watch.running.formula)
            at = watch.running.at
            self.observed[watch.running.name] = watch.end, at if isinstance(at, At) else at.end, -1
        for moment in self.dated.moments:
            for update in moment.updates:
                self._begin_watches(moment.day.time, self.order[update.running.name])
                self._look(update.running, update.occasion)
                fresh = self._memory(update.running.formula)
                value = self._read(update.running.formula)
                self._update(update.running, value)
                self.observed[update.running.name] = moment.day, update.running.at, update.occasion.nth - 1
                self.remembered |= fresh
            self._begin_watches(moment.day.time, len(self.order))
            if any(self._happen(event) for event in moment.events):  # after an end nothing is read
                break

    def _begin_watches(self, time: float, before: int) -> None:
        """Continuous watches that have begun; of those that begin now, the ones that stand above in the
        file."""
        self.ready |= {watch.running.name for watch in self.dated.watches if watch.start.time < time
                       or (watch.start.time == time and self.order[watch.running.name] < before)}

    def _look(self, owner: Running | Event, occasion: Occasion | None) -> None:
        self.owner, self.owner_place = self.seen.setdefault(owner.place, Seen()), owner.place
        self.occasion = occasion

    def _happen(self, dated_event: DatedEvent) -> bool:
        """Reads an event; True if it ends the contract on every path."""
        event = dated_event.event
        self._look(event, dated_event.occasion)
        holds = self._read(event.condition) if event.condition is not None else 1.0
        fresh = self._memory(*_formulas(event))
        before = self.known
        after = [self._act(actions, before) for actions, taken in (
            (event.then, holds is None or holds), (event.otherwise, not holds)) if taken]
        self.known = {name: value for name, value in after[0].items() if after[-1].get(name) == value}
        self.remembered |= fresh
        return bool(holds) and any(isinstance(action, End) for action in event.then)

    def _act(self, actions: tuple[Action, ...], known: dict[str, float]) -> dict[str, float]:
        """Reads the actions of one branch; the running values that are known after it."""
        self.known = dict(known)
        for action in actions:
            if isinstance(action, Pay):
                self._read(action.amount)
                if isinstance(action, Deliver) and action.which is not None:
                    self._read(action.which)
            elif isinstance(action, Assign):
                values = [(name, self._read(right)) for name, right in action.values]
                for name, value in values:
                    self._learn(name, value)
            else:
                break
        return self.known

    def _update(self, running: Running, value: float | None) -> None:
        """A running value has been observed; a total of what is known is known."""
        self.ready.add(running.name)
        total = running.how == "total" and value is not None and running.name in self.known
        self._learn(running.name, self.known[running.name] + value if total else None)

    def _learn(self, name: str, value: float | None) -> None:
        if value is None:
            self.known.pop(name, None)
        else:
            self.known[name] = value

    def _read(self, formula: Formula) -> float | None:
        """Reads a formula; its value where that is the same on every path and for every asset, else None."""
        match formula:
            case Number(value=value):
                return value
            case Name():
                return self._name(formula)
            case Given(term=term):
                return float(term in self.contract.terms)
            case ChoiceIs(term=term, word=word, negated=negated):
                stated = self._word(term, formula.place)
                return None if stated is None else float((stated == word) != negated)
            case OfAsset(asset=asset):
                if asset not in self.contract.assets:
                    self._word(asset, formula.place)
                return self._read(formula.operand)
            case Binary(symbol="and" | "or" as symbol):
                left = self._read(formula.left)
                if left is not None and bool(left) is (symbol == "or"):
                    return left
                right = self._read(formula.right)
                return right if left is not None else None
            case Binary(symbol="/"):
                parts = [self._read(formula.left), self._read(formula.right)]
                if parts[1] == 0:
                    self._divided_by_nothing(formula)
                return _folded(formula, parts)
            case IfElse():
                condition = self._read(formula.condition)
                if condition is not None:
                    return self._read(formula.yes if condition else formula.no)
                self._read(formula.yes)
                self._read(formula.no)
                return None
            case Previous():
                return self._previous(formula)
        return _folded(formula, [self._read(part) for part in children(formula)])

    def _name(self, formula: Name) -> float | None:
        name, place = formula.name, formula.place
        if name in self.lets:
            return self._read(self.lets[name])
        if name in self.running:
            if self.occasion:
                self.owner.reads(name, Reading(self.occasion.day, self.occasion.schedule, place))
            if name not in self.ready:
                self._not_begun(self.running[name], place)
            return self.known.get(name) if name in self.ready else None
        elif name in self.terms:
            return self._term(name, place)
        elif name in KNOWN_OF_DATE:
            known = getattr(self.occasion, name, math.nan)
            if not math.isnan(known):
                return known
            self.owner.wrong.setdefault(name, self._not_known(name, place))
        return None

    def _not_known(self, name: str, place: Place) -> Fault:
        stated = self.contract.terms.get(self.occasion.schedule) if self.occasion else None
        if name == "period" and self.contract.day_count == ICMA and stated is not None:
            return Fault(stated.place, f"{ICMA} measures by regular periods; expected a date rule for "
                                       f"'{self.occasion.schedule}' with steps of months that divide a year")
        return Fault(place, f"'{name}' is not known here: it belongs to a date")

    def _term(self, name: str, place: Place) -> float | None:
        stated = self.contract.terms.get(name)
        if stated is None:
            if name not in self.contract.at_fault:
                self._not_stated(name, place)
            return None
        self.owner.terms.add(name)
        if isinstance(stated, Word):
            return float(stated.text == "true")
        if isinstance(stated, Figures) and stated.per_date:
            per = self.terms[name].per
            if self.occasion is None or per not in self.occasion.dates:
                where = f"{self._on}, which is none of them" if self.occasion else " between them"
                text = f"'{name}' has one value for each date of '{per}' and is read{where} ({place})"
                self.owner.wrong.setdefault(name, Fault(stated.place, text))
        return None

    def _word(self, term: str, place: Place) -> str | None:
        if term in self.contract.terms:
            self.owner.terms.add(term)
            return self.contract.terms[term].text
        self._not_stated(term, place)
        return None

    def _previous(self, formula: Previous) -> float | None:
        if self.occasion is None or self.occasion.earlier is None:
            return self._read(formula.first)
        before = self.remembered[self.owner_place, formula.place]
        self.owner.add(before)
        return None

    def _memory(self, *formulas: Formula) -> dict[tuple[Place, Place], Seen]:
        """What each `previous` will ask for on the next date, read today."""
        found, owner = {}, self.owner
        for part in self._previous_in(formulas):
            self.owner = found[self.owner_place, part.place] = Seen()
            self._read(part.operand)
        self.owner = owner
        return found

    def _previous_in(self, formulas: tuple[Formula, ...]) -> list[Previous]:
        found = []
        for formula in formulas:
            if isinstance(formula, Previous):
                found.append(formula)
            inner = self.lets.get(formula.name) if isinstance(formula, Name) else None
            found += self._previous_in((inner,) if inner is not None else children(formula))
        return found

    @property
    def _on(self) -> str:
        return f" on {self.occasion.day}" if self.occasion else ""

    def _not_stated(self, term: str, place: Place) -> None:
        text = (f"the term '{term}' is missing: it is optional in '{self.contract.payoff.name}', but with "
                f"these terms it is read{self._on} ({place})")
        self.owner.wrong.setdefault(term, Fault(self.contract.terms_place or self.contract.place, text))

    def _divided_by_nothing(self, formula: Binary) -> None:
        """A division by 0 on every path: the fault of the dates, which let nothing be counted."""
        by = f"'{formula.right.name}', which is 0 then" if isinstance(formula.right, Name) else "what is 0 then"
        text = f"{self._on.strip() or 'at the start'} a formula divides by {by} ({formula.right.place})"
        stated = None
        if self.occasion and self.occasion.schedule:
            stated = place_of(self.contract.terms[self.occasion.schedule], self.occasion.nth - 1)
        self.owner.wrong.setdefault(f"{formula.right.place}{self._on}", Fault(stated or formula.right.place, text))

    def _not_begun(self, running: Running, place: Place) -> None:
        """A running value that is read before its first date: the fault of the dates that the contract
        gives it."""
        starts = [str(watch.start) for watch in self.dated.watches if watch.running.name == running.name]
        starts += [str(update.occasion.day) for moment in self.dated.moments for update in moment.updates
                   if update.running.name == running.name and update.first]
        begins = f"begins on {starts[0]}" if starts else "has no date"
        text = f"'{running.name}' is read{self._on} ({place}), but {begins}"
        ends = (running.at,) if isinstance(running.at, At) else (running.at.start, running.at.end)
        stated = [self.contract.terms[end.name].place for end in ends if end.name in self.contract.terms]
        place = stated[0] if len(stated) == len(ends) else self.contract.terms_place
        self.owner.wrong.setdefault(running.name, Fault(place or running.place, text))


def _formulas(event: Event) -> list[Formula]:
    """Every formula written in an event."""
    found = [event.condition] if event.condition is not None else []
    for action in (*event.then, *event.otherwise):
        if isinstance(action, Pay):
            found.append(action.amount)
            found += [action.which] if isinstance(action, Deliver) and action.which is not None else []
        elif isinstance(action, Assign):
            found += [right for _, right in action.values]
    return found


def _folded(formula: Formula, parts: list[float | None]) -> float | None:
    """The value of an operation whose parts are all known, where it is one of the plain ones."""
    if not parts or None in parts:
        return None
    match formula:
        case Unary(symbol="not"):
            return float(not parts[0])
        case Unary():
            return -parts[0]
        case Binary(symbol=symbol) if symbol in ARITHMETIC and not (symbol == "/" and parts[1] == 0):
            return float(ARITHMETIC[symbol](*parts))
        case Call(function="min" | "max" as function):
            return min(parts) if function == "min" else max(parts)
        case Call(function=function) if function in SAME_OF_ONE:
            return parts[0]
    return None
