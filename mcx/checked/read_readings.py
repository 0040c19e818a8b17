"""The other readings of a definition: what a termsheet's words are taken for when they mean something else.

A reading restates parts of its definition. What it restates replaces what stands there, and the whole is read again as
a definition of its own: so a reading can say whatever a definition can, and is checked as one.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from typing import TypeAlias

from mcx.checked.payoff import OtherReading, Payoff, Term
from mcx.checked.read_terms import few_enough
from mcx.checked.reading import check_keys, items_of, listed, mapping_of, offered, read, text_of, value_of
from mcx.checked.term_values import DATED_TYPES, NUMERIC, REFERENCE, TermReader
from mcx.faults import Fault
from mcx.text.located import Mapping, Node, Scalar, Sequence
from mcx.text.scalars import DATE, SPAN, expected, period, word

CHANGES = ("terms", "later", "let", "running", "events")
OF_EVENT = ("at", "from", "until", "if", "then", "else", "pay", "set", "end", "as", "part", "due")
MOVES = ("before", "after")
START = "start"  # in a date of a reading: the contract's start

ReadAgain: TypeAlias = Callable[[Mapping], tuple[Payoff | None, list[Fault]]]


def read_readings(body: Mapping, payoff: Payoff, read_again: ReadAgain) -> tuple[tuple[OtherReading, ...], list[Fault]]:
    """The other readings under `readings` of a definition that is sound by itself, and what is wrong with them.

    `read_again` reads the definition with other formulas, running values and events in it.
    """
    node, faults = body.get("readings"), []
    items = items_of(node, faults, "a list of readings, each beginning with '- name:'")
    if isinstance(node, Sequence) and not few_enough(node, "readings", faults):
        return (), faults
    found = [_Reading(body, payoff, read_again, faults).read(item) for item in items]
    seen: set[str] = set()
    for reading in filter(None, found):
        if reading.name in seen:
            faults.append(Fault(reading.place, f"a reading '{reading.name}' stands above already"))
        seen.add(reading.name)
    return tuple(filter(None, found)), faults


def with_start(payoff: Payoff, node: Node, start: Node) -> Node:
    """The value of a date term in a reading with the contract's start where it says 'start', unless that is a term."""
    if payoff.term(START) is not None:
        return node
    match node:
        case Scalar(text=text) if text == START:
            return start
        case Sequence():
            return Sequence(tuple(with_start(payoff, item, start) for item in node), node.place, node.flow)
        case Mapping():
            entries = tuple((key, with_start(payoff, value, start)) for key, value in node.entries)
            return Mapping(entries, node.place, node.flow)
    return node


class _Reading:
    """Reads one reading of a definition."""

    def __init__(self, body: Mapping, payoff: Payoff, read_again: ReadAgain, faults: list[Fault]):
        self.body, self.payoff, self.read_again, self.faults = body, payoff, read_again, faults

    def read(self, node: Node) -> OtherReading | None:
        before = len(self.faults)
        if not isinstance(node, Mapping):
            self.faults.append(expected("a reading, beginning with '- name:'", node))
            return None
        sound = check_keys(node, CHANGES, ("name", "about"), self.faults, "a reading")
        name, about = text_of(node, "name", self.faults), text_of(node, "about", self.faults)
        if sound and not any(key in node for key in CHANGES):
            self.faults.append(Fault(node.place, f"the reading changes nothing: expected {listed(CHANGES, 'or')}"))
        values = self._values(node)
        later = self._later(node)
        payoff = self.payoff
        if any(key in node for key in ("let", "running", "events")):
            changed = self.body
            for key in ("let", "running"):
                changed = self._restated(changed, key, self._entries(node, key, "names with their formulas"))
            changed = self._with_events(changed, self._entries(node, "events", "names of events and what changes"))
            if len(self.faults) > before:
                return None
            payoff, wrong = self.read_again(changed)
            self.faults += wrong
        if len(self.faults) > before:
            return None
        return OtherReading(name, about, node.get("name").place, payoff, values, later)

    def _entries(self, node: Mapping, key: str, what: str) -> tuple[tuple[Scalar, Node], ...]:
        mapping = mapping_of(node.get(key), self.faults, what)
        if mapping is not None and not mapping.entries:
            self.faults.append(expected(what, mapping, "the mapping is empty"))
        return mapping.entries if mapping else ()

    # Terms

    def _term(self, key: Scalar) -> Term | None:
        term = self.payoff.term(key.text)
        if term is None:
            known = [term.name for term in self.payoff.terms]
            self.faults.append(Fault(key.place, f"there is no term '{key.text}'{offered(key.text, known)}"))
        return term

    def _values(self, node: Mapping) -> tuple[tuple[str, Node], ...]:
        """Terms with another value, which any contract could state."""
        entries = self._entries(node, "terms", "terms and their values")
        for key, value in entries:
            term = self._term(key)
            if term is None:
                continue
            if term.type in (*NUMERIC, "asset"):
                text = f"'{term.name}' is of type '{term.type}'; a reading changes numbers and assets in formulas"
                self.faults.append(Fault(key.place, text))
            elif term.type not in DATED_TYPES:
                TermReader(self.payoff, (), self.faults).value(term, value)
            elif self._is_of_any_contract(term, value):
                reader = TermReader(self.payoff, (), self.faults)
                reader.nodes = {each.name: Scalar("0y", value.place) for each in self.payoff.terms}
                reader.value(term, with_start(self.payoff, value, Scalar("0y", value.place)))
        return tuple((key.text, value) for key, value in entries)

    def _is_of_any_contract(self, term: Term, value: Node) -> bool:
        """Whether dates are said by 'start' and by other terms: a definition knows no day."""
        wrong = [scalar for scalar in _scalars(value) if DATE.fullmatch(scalar.text) or SPAN.fullmatch(scalar.text)]
        for scalar in wrong:
            self.faults.append(expected("'start' or the name of another date term", scalar))
        for scalar in _scalars(value):
            named = REFERENCE.fullmatch(scalar.text)
            if named and named[1] == term.name:
                wrong.append(scalar)
                self.faults.append(Fault(scalar.place, f"'{term.name}' is said through itself"))
        return not wrong

    def _later(self, node: Mapping) -> tuple[tuple[str, int], ...]:
        """Date terms whose dates fall some business days later."""
        found = []
        for key, value in self._entries(node, "later", "date terms and business days"):
            term, lag = self._term(key), value_of(value, period, self.faults)
            if term is not None and term.type not in ("date", "dates"):
                self.faults.append(Fault(key.place, f"'{term.name}' is of type '{term.type}'; dates can fall later"))
            terms = node.get("terms")
            if isinstance(terms, Mapping) and key.text in terms:
                self.faults.append(Fault(key.place, f"'{key.text}' has another value in this reading already"))
            if lag is not None and (lag[0] < 1 or lag[1] != "business day"):
                self.faults.append(expected("a number of business days, as '1 business day'", value))
            elif lag is not None:
                found.append((key.text, lag[0]))
        return tuple(found)

    # Formulas, running values and events

    def _restated(self, body: Mapping, part: str, entries: tuple[tuple[Scalar, Node], ...]) -> Mapping:
        """The definition with other formulas under `let`, or other running values."""
        if not entries:
            return body
        written = body.get(part)
        known = written.keys() if isinstance(written, Mapping) else ()
        for key, _ in entries:
            if key.text not in known:
                what = "'let' name" if part == "let" else "running value"
                self.faults.append(Fault(key.place, f"there is no {what} '{key.text}'{offered(key.text, known)}"))
        restated = {key.text: (key, value) for key, value in entries}
        if not isinstance(written, Mapping):
            return body
        merged = tuple(restated.get(key.text, (key, value)) for key, value in written.entries)
        return _with(body, part, Mapping(merged, written.place, written.flow))

    def _with_events(self, body: Mapping, entries: tuple[tuple[Scalar, Node], ...]) -> Mapping:
        """The definition with events of which some keys are restated, or which stand elsewhere in the order."""
        if not entries:
            return body
        written = body.get("events")
        events = list(written)
        for key, change in entries:
            number = self._event(key, events)
            if number is None:
                continue
            mapping = mapping_of(change, self.faults, "the keys of the event that change")
            if mapping is None or not check_keys(mapping, (*OF_EVENT, *MOVES), (), self.faults,
                                                 f"the event '{key.text}' in a reading"):
                continue
            events[number] = _merged(events[number], mapping)
            self._move(events, number, mapping)
        return _with(body, "events", Sequence(tuple(events), written.place, written.flow))

    def _event(self, name: Scalar, events: list[Node]) -> int | None:
        """The position of the only event of a name."""
        names = [_name(event) for event in events]
        if names.count(name.text) == 1:
            return names.index(name.text)
        wrong = "there is no event" if name.text not in names else "there is more than one event"
        known = dict.fromkeys(filter(None, names))
        hint = offered(name.text, known) if name.text not in names else ""
        self.faults.append(Fault(name.place, f"{wrong} '{name.text}'{hint}"))
        return None

    def _move(self, events: list[Node], number: int, change: Mapping) -> None:
        moves = [key for key in change.keys() if key in MOVES]
        for key in moves[1:]:
            self.faults.append(Fault(change.key(key).place, f"'{key}' is a second move beside '{moves[0]}'; keep one"))
        for key in moves[:1]:
            moved = events.pop(number)
            other = value_of(change.get(key), word, self.faults)
            there = None if other is None else self._event(change.get(key), events)
            events.insert(number if there is None else there + (key == "after"), moved)


def _with(body: Mapping, part: str, node: Node) -> Mapping:
    entries = tuple((key, node if key.text == part else value) for key, value in body.entries)
    return Mapping(entries, body.place, body.flow)


def _merged(event: Mapping, change: Mapping) -> Mapping:
    """An event with keys stated anew; keys that move it are left out."""
    stated = {key.text: (key, value) for key, value in change.entries if key.text not in MOVES}
    kept = [stated.pop(key.text, (key, value)) for key, value in event.entries]
    return Mapping((*kept, *stated.values()), event.place, event.flow)


def _name(event: Node) -> str:
    """What a reading calls an event: its name, or, if it has none, the leg that it pays."""
    said: list[Fault] = []
    if not isinstance(event, Mapping):
        return ""
    return read(event, "name", word, said) or read(event, "as", word, said) or ""


def _scalars(node: Node) -> Iterator[Scalar]:
    match node:
        case Scalar():
            yield node
        case Sequence():
            for item in node:
                yield from _scalars(item)
        case Mapping():
            for key, value in node.entries:
                if key.text not in ("every", "count"):
                    yield from _scalars(value)
