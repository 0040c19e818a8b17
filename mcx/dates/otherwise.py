"""A dated contract in the other readings of its payoff, each with dates of its own."""

from __future__ import annotations

from dataclasses import dataclass, replace

from mcx.checked.contract import Contract, DayList, DayRef
from mcx.checked.payoff import OtherReading
from mcx.dates.business_days import GoodDays, NotCovered, good_days
from mcx.dates.dated_contract import DatedContract, Day
from mcx.dates.dating import date_contract
from mcx.faults import Fault


@dataclass(frozen=True, slots=True)
class DatedOtherwise:
    """A contract in another reading with every date known, None where it cannot be read so, and why."""

    reading: OtherReading
    dated: DatedContract | None
    faults: tuple[Fault, ...] = ()


def date_otherwise(dated: DatedContract) -> tuple[DatedOtherwise, ...]:
    """The contract in every other reading, in the order of the definition."""
    found = []
    for other in dated.contract.otherwise:
        contract, faults = other.contract, list(other.faults)
        if contract is not None and other.reading.later:
            contract, faults = _later(contract, other.reading, dated)
        if contract is None:
            found.append(DatedOtherwise(other.reading, None, tuple(faults)))
        else:
            again, faults = date_contract(contract, dated.valuation, dated.history, otherwise=True)
            found.append(DatedOtherwise(other.reading, again, tuple(faults)))
    return tuple(found)


def _later(
    contract: Contract, reading: OtherReading, dated: DatedContract
) -> tuple[Contract | None, list[Fault]]:
    """The contract with some dates business days later. Days before the valuation date are known, and stay."""
    if contract.calendar is None:
        return None, [Fault(reading.place, "business days need calendar dates; this contract uses times")]
    good, faults = good_days(contract.calendar)
    assert not faults, "the contract has been dated by this calendar"
    terms = dict(contract.terms)
    for name, count in reading.later:
        if name not in terms:
            return None, [Fault(reading.place, f"'{name}' is not stated in this contract")]
        place = terms[name].place
        try:
            days = tuple(DayRef(place, date=_moved(day, count, good)) for day in dated.schedules[name])
        except NotCovered as beyond:
            return None, [Fault(contract.calendar.place, str(beyond))]
        terms[name] = days[0] if isinstance(terms[name], DayRef) else DayList(place, days)
    return replace(contract, terms=terms), []


def _moved(day: Day, count: int, good: GoodDays):
    return day.date if day.time < 0.0 else good.add(day.date, count)
