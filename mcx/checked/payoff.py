"""A checked payoff definition: typed terms, `let` names, running values and events.

The dataclasses here are what the grammar's `payoff:` document becomes; `read_payoff` (below them) makes them.
"""

from __future__ import annotations

from dataclasses import dataclass

from mcx.checked.formula import Formula
from mcx.faults import Place

MONEY, MULTIPLES = "money per unit", "multiples of the notional"
BOND = "bond"  # the part of what an issuer owes in any case


@dataclass(frozen=True, slots=True)
class Term:
    """A named blank of a definition.

    `type` is one of number, percent, level, date, dates, watch, choice, flag, asset. `per` is '' or 'assets' or the
    name of a `dates` term. Bounds are None where not stated. `default` is the located node as written, or None.
    """

    name: str
    type: str
    place: Place
    about: str = ""
    per: str = ""
    optional: bool = False
    default: object | None = None  # a text.located Node
    choices: tuple[str, ...] = ()
    above: float | None = None
    below: float | None = None
    at_least: float | None = None
    at_most: float | None = None


@dataclass(frozen=True, slots=True)
class At:
    """When something happens: all dates of a `date`, `dates` or `watch` term, or a part of them.

    `part` is '', 'first', 'last', 'but_first' or 'but_last'; 'once' for `{once: NAME}`, where `name` is a running flag.
    """

    name: str
    place: Place
    part: str = ""


@dataclass(frozen=True, slots=True)
class Continuous:
    """`{continuous: [from, until]}`: the stretch between two dates, each a `date` term or its text in the contract."""

    start: At
    end: At
    place: Place


@dataclass(frozen=True, slots=True)
class Let:
    """A name for a formula, evaluated anew where it is used."""

    name: str
    formula: Formula
    place: Place


@dataclass(frozen=True, slots=True)
class Running:
    """A value carried along the path.

    `how` is average, total, product, lowest, highest, ever, always, latest (then `formula` is observed `at`), or 'set'
    (then only `start` is given and events change it). `start` is the value before the first date, or None.
    """

    name: str
    how: str
    place: Place
    formula: Formula | None = None
    at: At | Continuous | None = None
    start: Formula | None = None


@dataclass(frozen=True, slots=True)
class Pay:
    """Pay `amount` (a multiple of the notional, or money per unit). `due` names a date or dates term, 'same day',
    or '' for the contract's settlement lag."""

    amount: Formula
    place: Place
    leg: str = "payment"
    part: str = ""  # bond, coupon, option or not stated
    due: str = ""


@dataclass(frozen=True, slots=True)
class Deliver(Pay):
    """Deliver shares: `amount` of each asset for each unit of the notional (or each unit), of the assets for which the
    flag `which` holds (None: all of them)."""

    which: Formula | None = None


@dataclass(frozen=True, slots=True)
class Assign:
    """`set`: all right sides are read before any is written."""

    values: tuple[tuple[str, Formula], ...]
    place: Place


@dataclass(frozen=True, slots=True)
class End:
    """Nothing later is observed or newly owed, later events of the same date included."""

    place: Place


Action = Pay | Assign | End


@dataclass(frozen=True, slots=True)
class Event:
    """What happens on dates: `then` where the condition holds (or always, without one), else `otherwise`.

    `since` and `until` name date terms that narrow the dates, or are ''. A bare action is an event without condition.
    """

    at: At
    place: Place
    then: tuple[Action, ...]
    otherwise: tuple[Action, ...] = ()
    condition: Formula | None = None
    name: str = ""
    since: str = ""
    until: str = ""


@dataclass(frozen=True, slots=True)
class OtherReading:
    """Another reading of the definition, which its contracts are compared with.

    `payoff` is the definition as it stands in that reading; `values` are the terms that have another value in it, as
    located nodes by name; `later` are the date terms whose dates fall so many business days later.
    """

    name: str
    about: str
    place: Place
    payoff: Payoff
    values: tuple[tuple[str, object], ...] = ()  # text.located Nodes
    later: tuple[tuple[str, int], ...] = ()


@dataclass(frozen=True, slots=True)
class Payoff:
    """A definition. `assets` is the fewest and the most assets it takes (most None: any number); `pays` is what its
    amounts are, MONEY or MULTIPLES, or '' where it is for the contract to say."""

    name: str
    about: str
    terms: tuple[Term, ...]
    lets: tuple[Let, ...]
    running: tuple[Running, ...]
    events: tuple[Event, ...]
    place: Place
    assets: tuple[int, int | None] = (1, None)
    pays: str = ""
    readings: tuple[OtherReading, ...] = ()

    def term(self, name: str) -> Term | None:
        return next((term for term in self.terms if term.name == name), None)

    def payments(self) -> tuple[Pay, ...]:
        """Every payment of its events, in file order."""
        actions = [action for event in self.events for action in (*event.then, *event.otherwise)]
        return tuple(action for action in actions if isinstance(action, Pay))
