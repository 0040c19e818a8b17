"""The events of a definition: when something happens, on which condition, and what."""

from __future__ import annotations

import re

from mcx.checked.formula import Formula
from mcx.checked.names import Names
from mcx.checked.payoff import Action, Assign, At, Continuous, Deliver, End, Event, Pay
from mcx.checked.read_terms import few_enough
from mcx.checked.reading import check_keys, items_of, later_version, listed, mapping_of, offered, one_of, read, text_of
from mcx.faults import Fault, did_you_mean
from mcx.text.located import Mapping, Node, Scalar, Sequence
from mcx.text.scalars import expected, shortened, word

PARTS = ("first", "last", "but_first", "but_last")
ACTIONS = ("pay", "deliver", "set", "end")
OF_PAY = ("as", "part", "due")
OF_DELIVER = (*OF_PAY, "of")
KINDS_OF_LEG = ("bond", "coupon", "option")
AT = re.compile(r"(\w+)(?:\.(\w+))?")


class EventReader:
    """Reads events, and the `at` of running values; `settable` are the running values that events may change."""

    def __init__(self, names: Names, settable: frozenset[str], faults: list[Fault]):
        self.names, self.settable, self.faults = names, settable, faults
        self.widened: set[str] = set()  # values that are set to one number for each asset

    def events(self, node: Node | None) -> tuple[Event, ...]:
        items = items_of(node, self.faults, "a list of events, each beginning with '- at:'")
        if isinstance(node, Sequence) and not few_enough(node, "events", self.faults):
            return ()
        if node is not None and isinstance(node, Sequence) and not items:
            self.faults.append(expected("one event or more", node, "the list is empty"))
        events = [self._event(item) for item in items]
        return tuple(event for event in events if event is not None)

    def _event(self, node: Node) -> Event | None:
        faults, before = self.faults, len(self.faults)
        if not isinstance(node, Mapping):
            faults.append(expected("an event, beginning with '- at:'", node))
            return None
        check_keys(node, ("from", "until", "name", "if", "then", "else", *ACTIONS, *OF_DELIVER), ("at",), faults,
                   "the event")
        at = None if "at" not in node else self.at(node.get("at"), types=("date", "dates"))
        since, until = (self._date(node, key) for key in ("from", "until"))
        condition, then, otherwise = self._what(node)
        name = text_of(node, "name", faults)
        if len(faults) > before or at is None or not then:
            return None
        return Event(at, node.place, then, otherwise, condition, name, since, until)

    def _what(self, node: Mapping) -> tuple[Formula | None, tuple[Action, ...], tuple[Action, ...]]:
        """Condition and actions: `if`, `then`, `else`, or one action written into the event itself."""
        faults = self.faults
        bare = [key for key in (*ACTIONS, *OF_DELIVER) if key in node]
        if "if" not in node:
            for key in ("then", "else"):
                if key in node:
                    faults.append(Fault(node.key(key).place, f"'{key}' needs an 'if' in the same event"))
            if "then" not in node and "else" not in node:
                if not any(key in ACTIONS for key in bare):
                    faults.append(Fault(node.place, "nothing happens at this event: expected 'pay', 'deliver', 'set', "
                                                    "'end', or 'if' and 'then'"))
                    return None, (), ()
                action = self._action_of(node)
                return None, (action,) if action else (), ()
            return None, (), ()
        for key in bare:
            faults.append(Fault(node.key(key).place, f"beside 'if' an action stands in the list under 'then' or "
                                                     f"'else', not '{key}' in the event itself"))
        if "then" not in node:
            faults.append(Fault(node.key("if").place, "'if' needs a 'then' with a list of actions"))
        condition = self.names.one(node.get("if"), faults, flag=True)
        then, otherwise = (self._actions(node.get(key)) for key in ("then", "else"))
        return condition, then, otherwise

    def _actions(self, node: Node | None) -> tuple[Action, ...]:
        items = items_of(node, self.faults, "a list of actions, as '- pay: 1'")
        if isinstance(node, Sequence) and not items:
            self.faults.append(expected("one action or more", node, "the list is empty"))
        actions = [self._action(item) for item in items]
        for item, after in zip(actions, items[1:], strict=False):
            if isinstance(item, End):
                self.faults.append(Fault(after.place, "nothing happens after 'end' in the same list"))
                break
        return tuple(action for action in actions if action is not None)

    def _action(self, node: Node) -> Action | None:
        if isinstance(node, Scalar) and node.text == "end":
            return End(node.place)
        if not isinstance(node, Mapping):
            self.faults.append(expected("an action: 'pay: FORMULA', 'set: {NAME: FORMULA}' or 'end'", node))
            return None
        if not check_keys(node, (*ACTIONS, *OF_DELIVER), (), self.faults, "an action"):
            return None
        if not any(key in node for key in ACTIONS):
            self.faults.append(Fault(node.place, f"expected {listed(ACTIONS, 'or')} in an action"))
            return None
        return self._action_of(node)

    def _action_of(self, node: Mapping) -> Action | None:
        """The one action among the keys of a mapping."""
        stated = [key for key in node.keys() if key in ACTIONS]
        for key in stated[1:]:
            self.faults.append(Fault(node.key(key).place, f"'{key}' is a second action beside '{stated[0]}'; begin "
                                                          "it on a line of its own, under 'then' or in its own event"))
        fits = {"pay": OF_PAY, "deliver": OF_DELIVER}.get(stated[0], ())
        for key in OF_DELIVER:
            if key in node and key not in fits:
                goes = "'deliver' only" if key == "of" else "'pay' and 'deliver' only"
                self.faults.append(Fault(node.key(key).place, f"'{key}' goes with {goes}"))
        match stated[0]:
            case "pay":
                return self._pay(node)
            case "deliver":
                return self._deliver(node)
            case "set":
                return self._assign(node)
        value = node.get("end")
        if not (isinstance(value, Scalar) and value.absent):
            self.faults.append(expected("nothing behind 'end'", value))
        return End(node.key("end").place)

    def _pay(self, node: Mapping) -> Pay | None:
        faults = self.faults
        amount = self.names.one(node.get("pay"), faults, flag=False)
        leg, part, due = self._leg(node)
        return None if amount is None else Pay(amount, node.key("pay").place, leg, part, due)

    def _deliver(self, node: Mapping) -> Deliver | None:
        """`deliver:` how many shares, one number or one for each asset; `of:` a flag for each asset, or none."""
        faults = self.faults
        shares = self.names.formula(node.get("deliver"), faults)
        which = self.names.formula(node.get("of"), faults) if "of" in node else None
        for formula, flag in ((shares, False), (which, True)):
            if formula is not None and formula.kind.is_flag is not flag:
                wanted = "a flag, which says whether an asset is delivered" if flag else "numbers of shares"
                faults.append(Fault(formula.place, f"expected {wanted}, found {formula.kind.value}"))
                return None
        leg, part, due = self._leg(node)
        return None if shares is None else Deliver(shares, node.key("deliver").place, leg, part, due, which)

    def _leg(self, node: Mapping) -> tuple[str, str, str]:
        """To which leg and part an amount belongs, and when it is due."""
        faults = self.faults
        leg = read(node, "as", word, faults) or "payment"
        part = one_of(node.get("part"), KINDS_OF_LEG, faults, "a part") if "part" in node else ""
        due = self._due(node.get("due")) if "due" in node else ""
        return leg, part or "", due

    def _due(self, node: Node) -> str:
        known = ["same day", *(term.name for term in self.names.terms.values()
                               if term.type == "date" or (term.type == "dates" and term.per))]
        if isinstance(node, Scalar) and (node.text in known or node.text in self.names.broken):
            return node.text
        term = self.names.terms.get(node.text) if isinstance(node, Scalar) else None
        hint = did_you_mean(node.text, known).removeprefix("; ") if isinstance(node, Scalar) else ""
        if term is not None and term.type == "dates":
            hint = f"'{term.name}' is not 'per' a schedule, so it does not say which of its dates is meant"
        self.faults.append(expected("a date term, a 'dates' term that is 'per' a schedule, or 'same day'", node, hint))
        return ""

    def _assign(self, node: Mapping) -> Assign | None:
        faults = self.faults
        mapping = mapping_of(node.get("set"), faults, "running values with their formulas, as 'set: {missed: 0}'")
        if mapping is None:
            return None
        if not mapping.entries:
            faults.append(expected("one running value or more", mapping, "the mapping is empty"))
        values = []
        for key, value in mapping.entries:
            formula = self.names.formula(value, faults)
            if self._is_settable(key) and formula is not None and self._fits(key.text, formula):
                values.append((key.text, formula))
        return Assign(tuple(values), node.key("set").place)

    def _is_settable(self, key: Scalar) -> bool:
        name = key.text
        if name in self.settable:
            return True
        if name in self.names.kinds and name not in self.names.broken:
            text = f"'{shortened(name)}' cannot be set; 'set' changes running values that have a 'start' only"
        else:
            text = f"there is no running value '{shortened(name)}'{offered(name, sorted(self.settable))}"
        if name not in self.names.broken:
            self.faults.append(Fault(key.place, text))
        return False

    def _fits(self, name: str, formula: Formula) -> bool:
        if name in self.names.broken:
            return False
        kind = self.names.kinds[name]
        if kind.is_flag != formula.kind.is_flag:
            self.faults.append(Fault(formula.place, f"'{name}' starts as {kind.value} and cannot be set to "
                                                    f"{formula.kind.value}"))
            return False
        if formula.kind.per_asset and not kind.per_asset:
            self.widened.add(name)
        return True

    # Dates

    def at(self, node: Node, *, types: tuple[str, ...]) -> At | None:
        """When something happens; `types` are the types of term that may say it."""
        if isinstance(node, Mapping) and "once" in node:
            # The moment of a hit: `At(name, place, "once")` once the dates and the tape know it.
            self.faults.append(later_version(node.key("once"), "'once', the moment of a hit, is"))
            return None
        found = AT.fullmatch(node.text) if isinstance(node, Scalar) else None
        if not found:
            what = "a date or dates term, as 'expiry' or 'observations.last'"
            hint = ""
            if isinstance(node, Mapping) and "continuous" in node:
                hint = "only 'lowest', 'highest', 'ever' and 'always' can be watched continuously"
            self.faults.append(expected(what, node, hint))
            return None
        name, part = found[1], found[2] or ""
        return At(name, node.place, part) if self._is_dated(node, name, part, types) else None

    def _is_dated(self, node: Scalar, name: str, part: str, types: tuple[str, ...]) -> bool:
        term = self.names.terms.get(name)
        known = [each.name for each in self.names.terms.values() if each.type in types]
        wrong = ""
        if term is None:
            if name in self.names.broken:
                return False
            wrong = f"there is no term '{name}'{offered(name, known)}"
        elif term.type == "watch" and "watch" not in types:
            wrong = f"'{name}' may be watched continuously; an event happens at a date or dates term"
        elif term.type not in types:
            wrong = f"'{name}' is a term of type '{term.type}', not dates{offered('', known)}"
        elif part and part not in PARTS:
            wrong = f"'.{part}' is no part of a schedule{offered(part, PARTS)}"
        elif part and term.type != "dates":
            wrong = f"'{name}' is of type '{term.type}' and has no parts; leave out '.{part}'"
        if wrong:
            self.faults.append(Fault(node.place, wrong))
        return not wrong

    def observed_at(self, node: Node, how: str, watchable: tuple[str, ...]) -> At | Continuous | None:
        """When a running value is observed: on dates, or continuously."""
        if not (isinstance(node, Mapping) and "continuous" in node and how in watchable):
            return self.at(node, types=("date", "dates", "watch"))
        if not check_keys(node, (), ("continuous",), self.faults, "a continuous watch"):
            return None
        ends = node.get("continuous")
        if not isinstance(ends, Sequence) or len(ends) != 2:
            self.faults.append(expected("two dates, as 'continuous: [from, until]'", ends))
            return None
        start, end = (self._single(item) for item in ends)
        return None if start is None or end is None else Continuous(start, end, node.place)

    def _single(self, node: Node) -> At | None:
        at = self.at(node, types=("date", "dates"))
        if at and (at.part not in ("first", "last")) and self.names.terms[at.name].type == "dates":
            self.faults.append(Fault(node.place, f"'{node}' has several dates; expected one, as '{at.name}.first' or "
                                                 f"'{at.name}.last'"))
            return None
        return at

    def _date(self, node: Mapping, key: str) -> str:
        """The name of a date term under a key, or ''."""
        value = node.get(key)
        if value is None:
            return ""
        known = [term.name for term in self.names.terms.values() if term.type == "date"]
        if isinstance(value, Scalar) and (value.text in known or value.text in self.names.broken):
            return value.text
        hint = did_you_mean(value.text, known).removeprefix("; ") if isinstance(value, Scalar) else ""
        self.faults.append(expected(f"a term of type 'date' behind '{key}'", value, hint))
        return ""
