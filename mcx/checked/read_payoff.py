"""From a `payoff:` document to a `Payoff`: a definition with everything in it checked, all faults at once.

Kinds depend on whether there is one asset, so a definition is read again for each contract that uses it. By itself it
is read as for one asset where it may have one.
"""

from __future__ import annotations

import re
from dataclasses import dataclass, replace

from mcx.checked.formula import Formula
from mcx.checked.kinds import Kind
from mcx.checked.names import Names, in_order
from mcx.checked.payoff import MONEY, MULTIPLES, Let, Payoff, Running, Term
from mcx.checked.read_events import EventReader
from mcx.checked.read_readings import read_readings
from mcx.checked.read_terms import few_enough, read_terms, sound_name
from mcx.checked.reading import check_keys, listed, mapping_of, one_of, read, text_of
from mcx.checked.formula_syntax import names_in
from mcx.faults import Fault
from mcx.text.located import Document, Mapping, Node, Scalar
from mcx.text.scalars import expected, word

KEYS = ("about", "assets", "pays", "terms", "let", "running", "readings")
HOWS = ("average", "total", "product", "lowest", "highest", "ever", "always", "latest")
OF_FLAGS = ("ever", "always")
OF_EITHER = ("total", "latest")
WATCHABLE = ("lowest", "highest", "ever", "always")
NAME = re.compile(r"[a-z][a-z0-9_]*")
ASSETS = re.compile(r"([1-9][0-9]?)( or more)?")


def read_payoff(
    document: Document, *, assets: int | None = None, asset_names: tuple[str, ...] = ()
) -> tuple[Payoff | None, list[Fault]]:
    """The definition that a document says, None if anything is wrong with it.

    `assets` is the number of assets of the contract that uses it, `asset_names` their names; None and () while no
    contract is known.
    """
    body, faults = document.body, []
    check_keys(body, KEYS, ("payoff", "events"), faults, "the payoff")
    name, about = read(body, "payoff", _name, faults), text_of(body, "about", faults)
    fewest, most = read(body, "assets", _assets, faults) or (1, None)
    pays = one_of(body.get("pays"), (MONEY, MULTIPLES), faults, "what its amounts are") if "pays" in body else ""
    terms = read_terms(body.get("terms"), faults)
    count = max(fewest, min(assets or 1, most or assets or 1))  # out of range is the contract's fault, not ours
    reader = _Reader(body, terms, count == 1, asset_names if assets else None)
    found = reader.read()
    if faults or reader.faults or found is None or name is None:
        return None, faults + reader.faults
    payoff = Payoff(name, about, terms, *found, body.get("payoff").place, (fewest, most), pays)

    def read_again(changed: Mapping) -> tuple[Payoff | None, list[Fault]]:
        again = _Reader(changed, terms, count == 1, asset_names if assets else None)
        lets, running, events = again.read()
        return (None if again.faults else replace(payoff, lets=lets, running=running, events=events)), again.faults

    readings, faults = read_readings(body, payoff, read_again)
    return (None if faults else replace(payoff, readings=readings)), faults


def _name(node: Node) -> str | Fault:
    if isinstance(node, Scalar) and NAME.fullmatch(node.text):
        return node.text
    return expected("a name of lower-case letters, digits and '_'", node)


def _assets(node: Node) -> tuple[int, int | None] | Fault:
    found = ASSETS.fullmatch(node.text) if isinstance(node, Scalar) else None
    if not found:
        return expected("a number of assets: '1', '2', '2 or more'", node)
    return int(found[1]), None if found[2] else int(found[1])


@dataclass(frozen=True, slots=True)
class _Definition:
    """A `let` name or a running value as written; `how` is 'let', 'set' or how it is observed."""

    key: Scalar
    how: str
    formula: Node | None
    start: Node | None = None
    at: Node | None = None


class _Reader:
    """Reads the part of a definition in which names meet: `let`, `running` and `events`."""

    def __init__(self, body: Mapping, terms: tuple[Term, ...], single: bool, asset_names: tuple[str, ...] | None):
        self.body, self.terms, self.single, self.asset_names = body, terms, single, asset_names
        self.faults: list[Fault] = []

    def read(self):
        """Lets, running values and events. A value that an event sets to one number for each asset is one from its
        start on, which only the events tell: then all is read again with that known."""
        definitions = self._definitions()
        widened: set[str] = set()
        before = list(self.faults)
        while True:
            self.faults = list(before)
            names = Names(self.terms, self.single, self.asset_names)
            names.broken |= self._broken_terms()
            settable = frozenset(name for name, one in definitions.items() if one.how == "set")
            reader = EventReader(names, settable, self.faults)
            found = self._named(definitions, names, reader, widened)
            events = reader.events(self.body.get("events"))
            if reader.widened <= widened:
                break
            widened |= reader.widened
        lets = tuple(one for name, one in found.items() if isinstance(one, Let))
        running = tuple(one for name, one in found.items() if isinstance(one, Running))
        return lets, running, events

    def _broken_terms(self) -> set[str]:
        """Terms of which not even the type is known."""
        written = self.body.get("terms")
        known = {term.name for term in self.terms}
        return set(written.keys()) - known if isinstance(written, Mapping) else set()

    # Names as written

    def _definitions(self) -> dict[str, _Definition]:
        """`let` names and running values in file order; no name is taken twice."""
        found: dict[str, _Definition] = {}
        taken = {term.name: ("a term", term.place) for term in self.terms}
        lets = mapping_of(self.body.get("let"), self.faults, "names with their formulas")
        running = mapping_of(self.body.get("running"), self.faults, "running values, as 'NAME: {total: 1, at: dates}'")
        if not (few_enough(lets, "names under 'let'", self.faults)
                and few_enough(running, "running values", self.faults)):
            return {}
        written = [(key, _Definition(key, "let", value), "a 'let' name") for key, value in lets.entries] if lets else []
        for key, value in running.entries if running else ():
            written.append((key, self._running(key, value), "a running value"))
        for key, one, what in written:
            name = key.text
            if not sound_name(key, self.faults):
                continue
            if name in taken:
                other, place = taken[name]
                self.faults.append(Fault(key.place, f"'{name}' is {other} already, at line {place.line}"))
                continue
            taken[name] = (what, key.place)
            found[name] = one
        return found

    def _running(self, key: Scalar, node: Node) -> _Definition:
        """A running value as written; with how 'broken' where it is not said how it runs."""
        broken = _Definition(key, "broken", None)
        if not isinstance(node, Mapping):
            self.faults.append(expected(f"'{{total: FORMULA, at: dates}}' or '{{start: FORMULA}}' for '{key}'", node))
            return broken
        if not check_keys(node, (*HOWS, "at", "start"), (), self.faults, f"the running value '{key}'"):
            return broken
        hows = [key for key in node.keys() if key in HOWS]
        for how in hows[1:]:
            self.faults.append(Fault(node.key(how).place, f"'{how}' is a second rule beside '{hows[0]}'; keep one"))
        if len(hows) > 1:
            return broken
        if hows and "at" not in node:
            self.faults.append(Fault(node.place, f"'at' is missing in the running value '{key}': when it is observed"))
            return broken
        if not hows and ("at" in node or "start" not in node):
            self.faults.append(Fault(node.place, f"the running value '{key}' needs one of {listed(HOWS, 'or')} with "
                                                 f"'at', or a 'start' alone"))
            return broken
        how = hows[0] if hows else "set"
        return _Definition(key, how, node.get(how), node.get("start"), node.get("at"))

    # Names with their formulas

    def _named(self, definitions: dict[str, _Definition], names: Names, reader: EventReader,
               widened: set[str]) -> dict[str, Let | Running | None]:
        """Every name with its formula, in file order; None where it is at fault."""
        mentions = {name: names_in(one.formula) for name, one in definitions.items()}
        places = {name: one.key.place for name, one in definitions.items()}
        order, circular = in_order(mentions, places, self.faults)
        names.broken |= circular
        found: dict[str, Let | Running | None] = dict.fromkeys(definitions)
        for name in (*order, *sorted(circular)):
            one = definitions[name]
            if name in circular or one.how == "broken":
                names.broken.add(name)
                continue
            if one.how == "let":
                formula = names.formula(one.formula, self.faults)
                found[name] = None if formula is None else Let(name, formula, one.key.place)
                names.learn(name, formula, formula.kind if formula else None, let=True)
            else:
                running, kind = self._observed(name, one, names, reader)
                if kind and name in widened:
                    kind = names.kind(flag=kind.is_flag, per_asset=True)
                found[name] = running
                names.learn(name, None, kind, let=False)
        return found

    def _observed(self, name: str, one: _Definition, names: Names,
                  reader: EventReader) -> tuple[Running | None, Kind | None]:
        """A running value and the kind of what it holds."""
        before = len(self.faults)
        start = None if one.start is None else names.formula(one.start, self.faults, at_start=True)
        if one.how == "set":
            running = Running(name, "set", one.key.place, start=start)
            return (running, start.kind) if start else (None, None)
        at = reader.observed_at(one.at, one.how, WATCHABLE)
        formula = names.formula(one.formula, self.faults)
        kind = self._kind(one.how, formula, start, names) if formula else None
        if at is None or kind is None or len(self.faults) > before or (one.start is not None and start is None):
            return None, kind
        return Running(name, one.how, one.key.place, formula, at, start), kind

    def _kind(self, how: str, formula: Formula, start: Formula | None, names: Names) -> Kind | None:
        """The kind that a running value holds, if what it observes and starts from can be put together so."""
        kind = formula.kind
        if how in OF_FLAGS and not kind.is_flag:
            self.faults.append(Fault(formula.place, f"'{how}' asks about a flag, such as a comparison, found "
                                                    f"{kind.value}"))
            return None
        if how not in (*OF_FLAGS, *OF_EITHER) and kind.is_flag:
            self.faults.append(Fault(formula.place, f"expected a number under '{how}', found {kind.value}; write "
                                                    f"(1 if ... else 0)"))
            return None
        holds = Kind.of(flag=kind.is_flag and how != "total", per_asset=kind.per_asset)
        if start is None:
            return holds
        if start.kind.is_flag != holds.is_flag:
            self.faults.append(Fault(start.place, f"expected {holds.value} under 'start', found {start.kind.value}"))
            return None
        return names.kind(flag=holds.is_flag, per_asset=holds.per_asset or start.kind.per_asset)
