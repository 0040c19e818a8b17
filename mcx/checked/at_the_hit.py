"""What an event `at: {once: NAME}` may ask: the moment of a hit lies between dates.

There a running value has no value of its own, and nothing that belongs to a date is known: terms, `years` and the level
of the asset that is watched are all there is.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator

from mcx.checked.formula import Formula, Name, Previous, children
from mcx.checked.payoff import Assign, Deliver, Event, Let, Pay, Running, Term
from mcx.faults import Fault, did_you_mean

OF_DATES = ("nth", "n_dates", "period")
READABLE = "at the moment of a hit only terms, 'years' and the level of the watched asset can be read"


def hit_faults(
    terms: Iterable[Term], lets: Iterable[Let], running: Iterable[Running], events: Iterable[Event]
) -> list[Fault]:
    """The faults of every event that waits for a hit."""
    check = _Check({term.name: term for term in terms}, {let.name: let.formula for let in lets},
                   {one.name: one for one in running})
    return [fault for event in events if event.at.part == "once" for fault in check.event(event)]


class _Check:
    def __init__(self, terms: dict[str, Term], lets: dict[str, Formula], running: dict[str, Running]):
        self.terms, self.lets, self.running = terms, lets, running

    def event(self, event: Event) -> Iterator[Fault]:
        name, place = event.at.name, event.at.place
        waited = self.running.get(name)
        if waited is None:
            yield Fault(place, f"there is no running value '{name}'{did_you_mean(name, self.running)}")
        elif waited.how != "ever":
            yield Fault(place, f"'once' waits for a running value of 'ever'; '{name}' is of '{waited.how}'")
        elif waited.formula.kind.per_asset:
            yield Fault(place, f"'once' waits for one flag; '{name}' holds one for each asset: bring them together by "
                               f"any(...) or all(...)")
        if event.since or event.until:
            yield Fault(event.place, "'from' and 'until' narrow dates; the moment of a hit is narrowed by when it is "
                                     "watched")
        formulas = [event.condition] if event.condition is not None else []
        for action in (*event.then, *event.otherwise):
            if isinstance(action, Pay):
                formulas.append(action.amount)
                if isinstance(action, Deliver) and action.which is not None:
                    formulas.append(action.which)
                if action.due in self.terms and self.terms[action.due].type == "dates":
                    yield Fault(action.place, f"'{action.due}' has a date for each date of a schedule, and the moment "
                                              f"of a hit is none of them; expected a 'date' term or 'same day'")
            elif isinstance(action, Assign):
                formulas += [right for _, right in action.values]
        for formula in formulas:
            yield from self._formula(formula, formula)

    def _formula(self, formula: Formula, written: Formula) -> Iterator[Fault]:
        """The faults of a formula; those inside `let` names stand where the name is written."""
        match formula:
            case Name(name=name) if name in self.lets:
                yield from self._formula(self.lets[name], written)
            case Name(name=name) if name in self.running:
                yield Fault(written.place, f"{READABLE}; '{name}' is a running value")
            case Name(name=name) if name in OF_DATES:
                yield Fault(written.place, f"{READABLE}; '{name}' belongs to a date")
            case Name(name=name) if name in self.terms and self.terms[name].per not in ("", "assets"):
                yield Fault(written.place, f"{READABLE}; '{name}' has one value for each date of "
                                           f"'{self.terms[name].per}'")
            case Previous():
                yield Fault(written.place, f"{READABLE}; 'previous' belongs to a date")
        for part in children(formula):
            yield from self._formula(part, part if formula is written else written)
