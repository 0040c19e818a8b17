"""What a contract states of its own past: what happened and fixings do not tell, observations of disrupted days, and
adjustments after corporate actions."""

from __future__ import annotations

import datetime
from collections.abc import Callable, Iterable
from typing import TypeVar

from mcx.checked.contract import Known
from mcx.checked.payoff import Payoff, Running
from mcx.checked.reading import mapping_of, offered, value_of
from mcx.checked.values import amount
from mcx.faults import Fault
from mcx.text.located import Mapping, Node, Scalar
from mcx.text.scalars import DATE, date, expected, flag, number

T = TypeVar("T")

HAPPENED = "what happened by date, as 'hit: {2027-03-04: true}'"
OVERRIDES = "by asset and date another date, or the level that counts, as '{harbour: {2027-05-03: 2027-05-05}}'"
ADJUSTED = "factors by asset and date, as '{harbour: {2027-05-03: 2}}'"
FACTS = ("ever", "always")
WATCHABLE = (*FACTS, "lowest", "highest")

ByDate = dict[str, dict[datetime.date, Known]]


def read_happened(node: Node | None, payoff: Payoff, faults: list[Fault]) -> ByDate:
    """Values of running values as of the close of a date: 1.0 and 0.0 for flags; nothing for one that is at fault."""
    running = {each.name: each for each in payoff.running if each.how in WATCHABLE}
    return _by_date(node, running, HAPPENED, lambda name: _value_of(running[name]), faults,
                    "a running value that can be watched all the time")


def read_disruption(node: Node | None, assets: Iterable[str], faults: list[Fault]) -> ByDate:
    """For single observations, by asset and scheduled date, the date whose level counts, or the level."""
    return _by_date(node, assets, OVERRIDES, lambda _: _override, faults, "an asset of the contract")


def read_adjustments(node: Node | None, assets: Iterable[str], faults: list[Fault]) -> ByDate:
    """Factors on the levels of an asset from a date on."""
    return _by_date(node, assets, ADJUSTED, lambda _: amount, faults, "an asset of the contract")


def _value_of(running: Running) -> Callable[[Node], float | Fault]:
    if running.how not in FACTS:
        return number

    def fact(node: Node) -> float | Fault:
        found = flag(node)
        return found if isinstance(found, Fault) else float(found)

    return fact


def _override(node: Node) -> float | datetime.date | Fault:
    if isinstance(node, Scalar) and DATE.fullmatch(node.text):
        return date(node)
    found = amount(node)
    return expected("a date or a level", node) if isinstance(found, Fault) else found


def _by_date(
    node: Node | None, names: Iterable[str], what: str, parse: Callable[[str], Callable[[Node], T | Fault]],
    faults: list[Fault], noun: str,
) -> ByDate:
    mapping, names = mapping_of(node, faults, what), tuple(names)
    found: ByDate = {}
    for name, dates in mapping.entries if mapping else ():
        if name.text not in names:
            faults.append(Fault(name.place, f"'{name.text}' is not {noun}{offered(name.text, names)}"))
            continue
        if not isinstance(dates, Mapping) or not dates.entries:
            faults.append(expected(what, dates))
            found[name.text] = {}
            continue
        for day, value in dates.entries:
            when, known = value_of(day, date, faults), value_of(value, parse(name.text), faults)
            found.setdefault(name.text, {})
            if when is not None and known is not None:
                found[name.text][when] = Known(known, day.place)
    return found
