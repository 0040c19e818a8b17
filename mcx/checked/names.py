"""The names of one definition, and what formulas may know of them while the definition is read.

Terms are known from the start; `let` names and running values become known one by one, in an order in which each
comes after what its formula mentions.
"""

from __future__ import annotations

import graphlib
from collections.abc import Iterable, Mapping as MappingOf

from mcx.checked.expression import DATE_NAMES, Scope, read_formula
from mcx.checked.formula import Formula, Name, children
from mcx.checked.kinds import Kind
from mcx.checked.payoff import Term
from mcx.faults import Fault, Place
from mcx.text.located import Node

MOST_PARTS = 10_000  # of a formula, with the `let` names in it written out
DEEPEST = 100
DATED = ("date", "dates", "watch")
AT_START = "has no value in a 'start', which may use numbers and terms only"


class Names:
    """Kinds and standing of all names; reads formulas with them."""

    def __init__(self, terms: tuple[Term, ...], single: bool, asset_names: tuple[str, ...] | None):
        self.terms = {term.name: term for term in terms}
        self.single, self.asset_names = single, asset_names
        self.kinds: dict[str, Kind] = {name: self.kind(flag=False, per_asset=name == "spot")
                                       for name in ("spot", "years", *DATE_NAMES)}
        self.kinds |= {term.name: self._kind_of(term) for term in terms if self._kind_of(term)}
        self.broken: set[str] = set()
        self._weights: dict[str, tuple[int, int]] = {}  # of `let` names: parts and depth when written out

    def kind(self, *, flag: bool, per_asset: bool) -> Kind:
        """A kind of value; with a single asset 'for each asset' falls away."""
        return Kind.of(flag=flag, per_asset=per_asset and not self.single)

    def _kind_of(self, term: Term) -> Kind | None:
        if term.type in ("number", "percent", "level", "flag"):
            return self.kind(flag=term.type == "flag", per_asset=term.type == "level" or term.per == "assets")
        return None

    def learn(self, name: str, formula: Formula | None, kind: Kind | None, *, let: bool) -> None:
        """Make a name known, or known to be broken where there is no kind."""
        if kind is None:
            self.broken.add(name)
            return
        self.kinds[name] = kind
        if let and formula is not None:
            self._weights[name] = self._weight(formula)

    def formula(self, node: Node, faults: list[Fault], *, at_start: bool = False) -> Formula | None:
        """The tree of a formula; `at_start` for a `start`, before any date."""
        formula = read_formula(node, self._scope(at_start), faults)
        if formula is not None:
            parts, depth = self._weight(formula)
            if parts > MOST_PARTS or depth > DEEPEST:
                faults.append(Fault(formula.place, "with the names in it written out this formula is too large: at "
                                                   f"most {MOST_PARTS:,} parts and {DEEPEST} levels are read"))
                return None
        return formula

    def one(self, node: Node, faults: list[Fault], *, flag: bool) -> Formula | None:
        """The tree of a formula that must be one plain number, or one plain flag."""
        formula = self.formula(node, faults)
        if formula is None or formula.kind is Kind.of(flag=flag, per_asset=False):
            return formula
        hint = ""
        if formula.kind.is_flag is flag:
            hint = "; bring them together by " + ("any(...) or all(...)" if flag else
                                                  "worst(...), best(...), mean(...) or basket(...)")
        wanted = "a flag, such as a comparison" if flag else "a number"
        faults.append(Fault(formula.place, f"expected {wanted}, found {formula.kind.value}{hint}"))
        return None

    def _scope(self, at_start: bool) -> Scope:
        terms = self.terms.values()
        barred = {term.name: f"'{term.name}' is a matter of dates and has no value in a formula" for term in terms
                  if term.type in DATED}
        kinds: dict[str, Kind] = self.kinds
        broken = self.broken
        if at_start:
            kinds = {name: kind for name, kind in kinds.items() if name in self.terms}
            later = (set(self.kinds) | broken | {"previous"}) - set(self.terms)
            barred |= {name: f"'{name}' {AT_START}" for name in later}
            broken = broken & set(self.terms)
        return Scope(
            names=kinds, choices={term.name: term.choices for term in terms if term.type == "choice"},
            optional=tuple(term.name for term in terms if term.optional),
            asset_terms=tuple(term.name for term in terms if term.type == "asset"),
            asset_names=self.asset_names, single=self.single, barred=barred, broken=frozenset(broken),
        )

    def _weight(self, formula: Formula) -> tuple[int, int]:
        """How many parts a formula has, and how many levels, with `let` names written out."""
        if isinstance(formula, Name):
            return self._weights.get(formula.name, (1, 1))
        parts = [self._weight(part) for part in children(formula)]
        return 1 + sum(count for count, _ in parts), 1 + max((depth for _, depth in parts), default=0)


def in_order(
    mentions: MappingOf[str, Iterable[str]], places: MappingOf[str, Place], faults: list[Fault]
) -> tuple[list[str], set[str]]:
    """The names so that each comes after those that it mentions, and the names that go round in a circle."""
    circular: set[str] = set()
    while True:
        graph = {name: [other for other in others if other in mentions and other not in circular]
                 for name, others in mentions.items() if name not in circular}
        try:
            return list(graphlib.TopologicalSorter(graph).static_order()), circular
        except graphlib.CycleError as error:
            circle = list(dict.fromkeys(reversed(error.args[1])))
            first = min(circle, key=lambda name: places[name])
            at = circle.index(first)
            way = " to ".join(f"'{name}'" for name in (*circle[at:], *circle[:at], first))
            faults.append(Fault(places[first], f"'{first}' is said through itself" +
                                (f": from {way}" if len(circle) > 1 else "")))
            circular |= set(circle)
