"""The values of a contract's terms, each read as its type in the definition says.

Numbers, percentages and levels become `Figures`; choices, assets and flags `Word`s; dates stay as they were
written (`DayRef`, `DayList`, `DayRule`, `Stretch`) until `dates/` works them out.
"""

from __future__ import annotations

import re
from collections.abc import Callable

from mcx.checked.contract import DayList, DayRef, DayRule, Figures, LevelFixing, Period, Stretch, TermValue, Word
from mcx.checked.payoff import Payoff, Term
from mcx.checked.reading import check_keys, listed, offered, one_of, value_of
from mcx.checked.values import amount
from mcx.faults import Fault, Place, did_you_mean
from mcx.text.located import Mapping, Node, Scalar, Sequence
from mcx.text.scalars import DATE, SPAN, date, date_meant, expected, flag, number, percent, period, shown, time

DATED_TYPES = ("date", "dates", "watch")
REFERENCE = re.compile(r"([A-Za-z_]\w*)(?:\.(\w+))?")
ONE_OF_MANY = ("first", "last")
SOME_OF_MANY = (*ONE_OF_MANY, "but_first", "but_last")
A_DATE = "a date such as '2026-11-16', a time such as '0.25y' or the name of another date term"
SOME_DATES = ("dates such as '[2026-11-16, 2027-05-17]', a rule such as '{from: 2026-11-16, until: 2027-11-16, "
              "every: 3 months}', or the name of another date term")
A_WATCH = "dates, a rule of dates, the name of another date term, or '{continuous: [from, until]}'"
MOST_STEPS = 10_000
OBSERVED = ("fixing", "average", "lowest", "highest")
NUMERIC: dict[str, Callable[[Node], float | Fault]] = {"number": number, "percent": percent, "level": amount}


class TermReader:
    """Reads the terms of one contract; collects faults, and every date and time that was written out."""

    def __init__(self, payoff: Payoff, assets: tuple[str, ...], faults: list[Fault]):
        self.payoff, self.assets, self.faults = payoff, assets, faults
        self.nodes: dict[str, Node] = {}  # of the terms stated, and the defaults
        self.written: list[DayRef] = []  # dates and times written out, not those named
        self.at_fault: frozenset[str] = frozenset()  # terms without a value that have, or may have, one

    def read(self, mapping: Mapping | None, place: Place) -> dict[str, TermValue]:
        """The values by name: those stated, and defaults. Optional terms that are not stated are absent."""
        terms = self.payoff.terms
        mapping = mapping or Mapping((), place)
        needed = [term.name for term in terms if not term.optional and term.default is None]
        known = [term.name for term in terms]
        check_keys(mapping, known, needed, self.faults, f"the terms of '{self.payoff.name}'")
        defaults = {term.name: term.default for term in terms if term.default is not None}
        self.nodes = defaults | {name.text: node for name, node in mapping.entries}
        stated = [term for term in terms if term.name in self.nodes]
        values = {term.name: self.value(term, self.nodes[term.name]) for term in stated}
        found = {name: value for name, value in values.items() if value is not None}
        meant = {*needed, *values} if set(mapping.keys()) <= set(known) else set(known)  # what was misspelt may be any
        self.at_fault = frozenset(meant - set(found))
        return found

    def value(self, term: Term, node: Node) -> TermValue | None:
        """The value of one term; None and a fault where it is wrong."""
        match term.type:
            case "choice":
                return self._word(one_of(node, term.choices, self.faults, f"'{term.name}' to be"), node)
            case "asset" if not self.assets:  # the contract's assets are at fault
                return None
            case "asset":
                return self._word(one_of(node, self.assets, self.faults, f"'{term.name}' to be"), node)
            case "flag":
                value = value_of(node, flag, self.faults)
                return self._word(None if value is None else str(value).lower(), node)
            case "date":
                return self._day(node)
            case "dates" | "watch":
                return self._days(term, node)
        return self._figures(term, node)

    def _word(self, text: str | None, node: Node) -> Word | None:
        return None if text is None else Word(text, node.place)

    def _level_fixing(self, term: Term, node: Mapping) -> LevelFixing | None:
        """`{fixing: DATE}`, `{average: DATES}`, `{lowest: DATES}` or `{highest: DATES}` in place of a level."""
        if not check_keys(node, (), node.keys()[:1], self.faults, f"'{term.name}', which is observed"):
            return None
        (how, dates), = node.entries
        found = self._day(dates) if how.text == "fixing" else self._days(term, dates)
        return None if found is None else LevelFixing(how.text, found, node.place)

    def _figures(self, term: Term, node: Node) -> Figures | LevelFixing | None:
        """One number, one for each date, one for each asset, or one for each of both; or how a level is observed."""
        if term.type == "level" and isinstance(node, Mapping) and set(node.keys()) & set(OBSERVED) - set(self.assets):
            return self._level_fixing(term, node)
        if isinstance(node, Sequence) and term.per not in ("", "assets"):
            if not node.items:
                self.faults.append(expected(f"one number for each date of '{term.per}'", node,
                                            "the list is empty"))
                return None
            rows = [self._row(term, item) for item in node]
            if None in rows:
                return None
            width = max(len(row) for row in rows)
            spread = tuple(row if len(row) == width else row * width for row in rows)
            per_asset = any(not isinstance(item, Scalar) for item in node)
            return Figures(spread, node.place, per_date=True, per_asset=per_asset)
        row = self._row(term, node)
        return None if row is None else Figures((row,), node.place, per_asset=not isinstance(node, Scalar))

    def _row(self, term: Term, node: Node) -> tuple[float, ...] | None:
        """One number, or one for each asset in the contract's order."""
        if isinstance(node, Scalar):
            nodes = [node]
        elif term.type != "level" and term.per != "assets":
            what = "one number, or a list with one for each date of " if term.per else "one number"
            self.faults.append(expected(what + (f"'{term.per}'" if term.per else ""), node))
            return None
        elif not self.assets:  # the contract's assets are at fault
            return None
        elif isinstance(node, Mapping):
            if not check_keys(node, (), self.assets, self.faults, f"'{term.name}', which goes by asset"):
                return None
            nodes = [node.get(name) for name in self.assets]
        elif len(node) != len(self.assets):
            assets = f"{len(self.assets)} assets: {listed(self.assets)}"
            self.faults.append(Fault(node.place, f"'{term.name}' has {len(node)} numbers for {assets}"))
            return None
        else:
            nodes = list(node)
        row = [self._number(term, one) for one in nodes]
        return None if None in row else tuple(row)

    def _number(self, term: Term, node: Node) -> float | None:
        value = value_of(node, NUMERIC[term.type], self.faults)
        if value is None:
            return None
        limits = [(term.above, value > (term.above or 0), "above"),
                  (term.below, value < (term.below or 0), "below"),
                  (term.at_least, value >= (term.at_least or 0), "at least"),
                  (term.at_most, value <= (term.at_most or 0), "at most")]
        for limit, holds, words in limits:
            if limit is not None and not holds:
                bound = f"{100 * limit:.12g}%" if term.type == "percent" else f"{limit:.12g}"
                self.faults.append(Fault(node.place,
                                         f"'{term.name}' must be {words} {bound}, found {shown(node)}"))
                return None
        return value

    def _days(self, term: Term, node: Node) -> TermValue | None:
        if isinstance(node, Sequence):
            days = [self._day(item) for item in node]
            if not days:
                self.faults.append(expected("one date or more", node, "the list is empty"))
            return None if None in days or not days else DayList(node.place, tuple(days))
        if isinstance(node, Scalar):
            day = self._day(node, many=True, what=A_WATCH if term.type == "watch" else SOME_DATES)
            return None if day is None else DayList(node.place, (day,))
        if "continuous" in node and term.type == "watch":
            return self._stretch(term, node)
        return self._rule(term, node)

    def _stretch(self, term: Term, node: Mapping) -> Stretch | None:
        ends = node.get("continuous")
        if not check_keys(node, (), ("continuous",), self.faults, f"'{term.name}'"):
            return None
        if not isinstance(ends, Sequence) or len(ends) != 2:
            self.faults.append(expected("two dates, as in '{continuous: [from, until]}'", ends))
            return None
        start, end = map(self._day, ends)
        return None if start is None or end is None else Stretch(node.place, start, end)

    def _rule(self, term: Term, node: Mapping) -> DayRule | None:
        """`{from:, until:, every:}` or `{count:, until:}`; with times `from` may be left out."""
        what = f"the date rule '{term.name}'"
        if "continuous" in node:
            text = f"'{term.name}' is a list of dates; only a watch term can be continuous"
            self.faults.append(Fault(node.key("continuous").place, text))
            return None
        if "count" in node and "every" in node:
            self.faults.append(Fault(node.key("count").place,
                                     f"{what} has both 'every' and 'count'; keep one"))
            return None
        needed = ("until", "count" if "count" in node else "every")
        sound = check_keys(node, ("from", "end_of_month"), needed, self.faults, what)
        start, until = (self._day(node.get(key)) if key in node else None for key in ("from", "until"))
        count = self._count(node.get("count")) if "count" in node else None
        every = self._every(node.get("every")) if "every" in node else None
        month_end = "end_of_month" in node and value_of(node.get("end_of_month"), flag, self.faults) is True
        whole = sound and until is not None and ("from" not in node or start is not None)
        if not whole or (count is None and every is None):
            return None
        return DayRule(node.place, until, start, every, count, month_end)

    def _count(self, node: Node) -> int | None:
        value = value_of(node, number, self.faults)
        if value is None:
            return None
        if value != int(value) or not 1 <= value <= MOST_STEPS:
            self.faults.append(expected(f"a whole number of steps from 1 to {MOST_STEPS}", node))
            return None
        return int(value)

    def _every(self, node: Node) -> Period | None:
        value = value_of(node, period, self.faults)
        if value is None:
            return None
        if value[0] == 0:
            self.faults.append(expected("a step of at least 1", node))
            return None
        return Period(*value)

    def _day(self, node: Node, many: bool = False, what: str = A_DATE) -> DayRef | None:
        """A single date, or, with `many`, also all dates of a term or all but one; `what` is expected."""
        found = REFERENCE.fullmatch(node.text) if isinstance(node, Scalar) else None
        if isinstance(node, Scalar) and DATE.fullmatch(node.text):
            value = value_of(node, date, self.faults)
            ref = None if value is None else DayRef(node.place, date=value)
        elif isinstance(node, Scalar) and SPAN.fullmatch(node.text):
            value = value_of(node, time, self.faults)
            ref = None if value is None else DayRef(node.place, time=value)
        elif found:
            return self._named(node, found[1], found[2] or "", many, what)
        else:
            self.faults.append(expected(what, node, date_meant(node)))
            return None
        self.written += [ref] if ref else []
        return ref

    def _named(self, node: Scalar, name: str, part: str, many: bool, what: str) -> DayRef | None:
        """A date given through another term."""
        dated = {term.name: term for term in self.payoff.terms if term.type in DATED_TYPES}
        wrong = ""
        if name not in dated:
            self.faults.append(expected(what, node, did_you_mean(name, dated).removeprefix("; ")))
            return None
        told = self.nodes.get(name)
        if told is None:
            wrong = f"'{name}' is not stated in this contract"
        elif dated[name].type == "date":
            wrong = f"'{name}' is a single date; leave out '.{part}'" if part else ""
        elif part not in ("", *SOME_OF_MANY):
            wrong = f"'.{part}' is no part of '{name}'{offered(part, SOME_OF_MANY)}"
        elif not many and part not in ONE_OF_MANY:
            wrong = f"'{node.text}' has several dates; expected one, as '{name}.first' or '{name}.last'"
        elif part not in ONE_OF_MANY and isinstance(told, Mapping) and "continuous" in told:
            wrong = f"'{name}' is watched continuously and has no list of dates"
        if wrong:
            self.faults.append(Fault(node.place, wrong))
            return None
        return DayRef(node.place, term=name, part=part)
