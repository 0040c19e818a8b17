"""A small contract of dates on its way to a dated one."""

from __future__ import annotations

from datetime import date

from mcx.checked.load import checked_request
from mcx.dates.dated_contract import DatedContract, DatedEvent
from mcx.dates.dating import date_contract
from mcx.text.documents import parse_documents

TODAY = date(2026, 12, 1)
HEAD = """\
payoff: own
terms:
  observations: {type: dates}
"""
CONTRACT = """\
contract: Harbour note
currency: EUR
notional: 1000
assets: [harbour]
start: 2026-11-16
day_count: 30/360
settlement: 2 business days
calendar: {holidays: ECB, roll: modified following}
payoff: own
terms:
  observations: {from: 2027-02-16, until: 2027-11-16, every: 3 months}
"""
IN_YEARS = """\
contract: Harbour option
currency: EUR
units: 1
assets: [harbour]
payoff: own
terms:
  observations: {count: 4, until: 1y}
"""
PAY = "  - at: observations\n    pay: spot / 100\n"


def dated(terms: str = "", events: str = PAY, more: str = "", valuation: date | None = TODAY,
          contract: str = CONTRACT,
          parts: str = "") -> tuple[DatedContract | None, list[str]]:
    """A dated contract from more terms of a definition, its parts before the events, its events, and the
    contract's further lines; and the faults."""
    text = f"{HEAD}{terms}{parts}events:\n{events}---\n{contract}{more}"
    documents, faults = parse_documents(text.encode(), "n.yaml")
    asked, faults = checked_request(documents, faults)
    assert faults == [], "\n".join(map(str, faults))
    found, faults = date_contract(asked.contracts[0], valuation)
    assert (found is None) == bool(faults)
    return found, [fault.text for fault in faults]


def events_of(found: DatedContract) -> list[DatedEvent]:
    return [event for moment in found.moments for event in moment.events]


def places(text: str, valuation: date = TODAY) -> list[str]:
    """The places of all faults of a contract and its dates."""
    documents, faults = parse_documents(text.encode(), "n.yaml")
    asked, faults = checked_request(documents, faults)
    (contract,) = asked.contracts
    found, wrong = date_contract(contract, valuation)
    assert found is None
    return [f"{fault.place.line}:{fault.place.column}" for fault in sorted({*faults, *wrong})]
