"""From a `contract:` document to a `Contract`: a payoff's terms filled in, and everything stated that it
needs.

Contracts with calendar dates must state start, settlement and calendar; textbook contracts use times and none
of these. Read `read_contract` first; the values of the terms are read in `term_values.py`.
"""

from __future__ import annotations

import datetime
from collections.abc import Mapping as MappingOf
from dataclasses import replace

from mcx.checked.contract import BusinessDays, Contract, ContractOtherwise, DayRef, DayRule, Period, TermValue
from mcx.checked.conversions import read_conversion
from mcx.checked.day_count_names import day_count_name
from mcx.checked.formula import Formula, Name, walk
from mcx.checked.payoff import MONEY, MULTIPLES, Assign, Deliver, OtherReading, Pay, Payoff
from mcx.checked.read_history import read_adjustments, read_disruption, read_happened
from mcx.checked.read_payoff import read_payoff
from mcx.checked.read_readings import with_start
from mcx.checked.read_terms import read_terms
from mcx.checked.reading import (
    check_keys,
    items_of,
    mapping_of,
    offered,
    one_of,
    read,
    text_of,
    value_of,
)
from mcx.checked.term_values import DATED_TYPES, TermReader
from mcx.checked.values import amount, asset_name, currency_code
from mcx.faults import Fault, did_you_mean
from mcx.text.located import Document, Mapping, Node, Scalar, Sequence
from mcx.text.scalars import date, expected, period, shortened, word

KEYS = ("contract", "currency", "notional", "units", "denomination", "assets", "start", "day_count", "settlement",
        "calendar", "payment_calendar", "conversion", "payoff", "terms", "happened", "disruption", "adjustments")
REQUIRED = ("contract", "currency", "assets", "payoff", "terms")
CALENDAR_KEYS = ("start", "day_count", "settlement", "calendar", "payment_calendar")  # not for textbook contracts
LATER = ("rounding",)
PAST = ("happened", "disruption", "adjustments")
LONGEST_LAG = 250  # business days, a year
OPEN = ("in all", "in any")
ROLLS = ("following", "modified following", "preceding")


def read_contract(
    document: Document, definitions: MappingOf[str, Document]
) -> tuple[Contract | None, list[Fault]]:
    """The contract that a document says as far as it could be read (see `Contract`), None where it is not known which
    terms its payoff has; and what is wrong. `definitions` gives payoffs by name."""
    body, faults = document.body, []
    size = _size(body, faults)
    title, currency = text_of(body, "contract", faults), read(body, "currency", currency_code, faults)
    frame: list[Fault] = []
    assets = asset_names(body.get("assets"), frame)
    start = read(body, "start", _start, frame)
    settlement = read(body, "settlement", _settlement, frame)
    day_count = read(body, "day_count", day_count_name, frame)
    calendar, payment_calendar = (_calendar(body, key, frame) for key in ("calendar", "payment_calendar"))
    conversion = read_conversion(body.get("conversion"), assets, faults)
    payoff = _payoff(body, definitions, assets, faults)
    terms = mapping_of(body.get("terms"), faults, "terms and their values")
    if payoff is None:
        check_keys(body, KEYS, REQUIRED, faults, "the contract", LATER)
        return None, faults + frame
    _check_size(body, payoff, faults)
    denomination = _denomination(body, payoff, size.get("notional"), faults)
    reader = TermReader(payoff, assets, faults)
    values = reader.read(terms, body.place)
    textbook = _is_textbook(reader.written)
    _check_times(reader.written, textbook, values, faults)
    _check_keys(body, _is_dated(body, textbook, reader), payoff, frame)
    contract = Contract(
        title=title, currency=currency or "", assets=assets, payoff=_begun(payoff, values), terms=values,
        place=body.get("contract").place, notional=size.get("notional"), units=size.get("units"),
        denomination=denomination, start=start,
        day_count=day_count or "", settlement=settlement, calendar=calendar, payment_calendar=payment_calendar,
        textbook=textbook, conversion=conversion, happened=read_happened(body.get("happened"), payoff, faults),
        disruption=read_disruption(body.get("disruption"), assets, faults),
        adjustments=read_adjustments(body.get("adjustments"), assets, faults), text=document.text,
        terms_place=(terms or body).place,
        at_fault=reader.at_fault,
        framed=not frame and (textbook or (start and settlement and calendar) is not None),
    )
    if not faults and not frame:
        others = tuple(_otherwise(reading, contract, terms, body.get("start")) for reading in payoff.readings)
        contract = replace(contract, otherwise=others)
    return contract, faults + frame


def _otherwise(reading: OtherReading, contract: Contract, terms: Mapping, start: Node | None) -> ContractOtherwise:
    """A sound contract in another reading of its payoff; `terms` as it states them."""
    faults: list[Fault] = []
    start = start or Scalar("0y", contract.place)
    changed = {name: with_start(contract.payoff, node, start) for name, node in reading.values}
    stated = {key.text: (key, changed.pop(key.text, value)) for key, value in terms.entries}
    added = ((Scalar(name, node.place), node) for name, node in changed.items())
    reader = TermReader(contract.payoff, contract.assets, faults)
    values = reader.read(Mapping((*stated.values(), *added), terms.place), terms.place)
    _check_times(reader.written, contract.textbook, values, faults)
    if faults:
        return ContractOtherwise(reading, None, tuple(faults))
    # What the contract states may not count in this reading (a strike that the average takes the place of).
    known = tuple(replace(term, optional=term.name not in values) for term in reading.payoff.terms)
    payoff = replace(_begun(reading.payoff, values), terms=known)
    return ContractOtherwise(reading, replace(contract, payoff=payoff, terms=values))


def asset_names(node: Node | None, faults: list[Fault]) -> tuple[str, ...]:
    """The contract's assets in its own order; () where any of them is wrong."""
    items = items_of(node, faults, "a list of assets, as '[harbour]'")
    if isinstance(node, Sequence) and not items:
        faults.append(expected("one asset or more", node, "the list is empty"))
    names: list[str] = []
    sound = True
    for item in items:
        name = value_of(item, asset_name, faults)
        twice = name in names
        if twice:
            faults.append(Fault(item.place, f"'{name}' stands twice in 'assets'"))
        sound = sound and name is not None and not twice
        names += [name] if name is not None else []
    return tuple(names) if sound else ()


def _size(body: Mapping, faults: list[Fault]) -> dict[str, float]:
    """The notional or the number of units, exactly one of them."""
    stated = [key for key in ("notional", "units") if key in body]
    two = "'notional' (payments are multiples of it) or 'units' (payments are money per unit)"
    if len(stated) == 2:
        faults.append(Fault(body.key("units").place, f"a contract has {two}, not both"))
    elif not stated and not _is_meant(body, "notional", "units"):
        faults.append(Fault(body.place, f"{two} is missing in the contract"))
    return {key: read(body, key, amount, faults) for key in stated}


def _check_size(body: Mapping, payoff: Payoff, faults: list[Fault]) -> None:
    """Money per unit times a notional, or a multiple of the notional times a number of units, is no amount at all."""
    wrong, right = {MONEY: ("notional", "units"), MULTIPLES: ("units", "notional")}.get(payoff.pays, ("", ""))
    if wrong in body and right not in body:
        text = f"'{payoff.name}' pays {payoff.pays}, which goes with '{right}', not with '{wrong}'"
        faults.append(Fault(body.key(wrong).place, text))


def _denomination(body: Mapping, payoff: Payoff, notional: float | None, faults: list[Fault]) -> float | None:
    """The nominal amount of one note: needed where shares are delivered, since only whole ones of each note are."""
    delivers = any(isinstance(action, Deliver) for event in payoff.events for action in (*event.then, *event.otherwise))
    found = read(body, "denomination", amount, faults)
    if "denomination" in body and not (delivers and "notional" in body):
        text = f"'{payoff.name}' delivers no shares" if not delivers else "with 'units' each unit is one note"
        faults.append(Fault(body.key("denomination").place, f"{text}; leave out 'denomination'"))
    elif delivers and notional is not None and "denomination" not in body:
        faults.append(Fault(body.place, f"'denomination' is missing in the contract: '{payoff.name}' delivers whole "
                                        "shares for each note and pays fractions in cash"))
    elif found and notional and abs(notional / found - round(notional / found)) > 1e-9:
        faults.append(Fault(body.get("denomination").place, "the notional is no whole number of notes of this size"))
    return found


def _payoff(
    body: Mapping, definitions: MappingOf[str, Document], assets: tuple[str, ...], faults: list[Fault]
) -> Payoff | None:
    """The definition that the contract names, checked for its assets; without events where it is at fault."""
    name = read(body, "payoff", word, faults)
    if name is None:
        return None
    if name not in definitions:
        text = f"there is no payoff '{shortened(name)}'{offered(name, definitions)}"
        faults.append(Fault(body.get("payoff").place, text))
        return None
    payoff, wrong = read_payoff(definitions[name], assets=len(assets) or None, asset_names=assets)
    faults += wrong
    if payoff is None:
        return _terms_alone(definitions[name])
    if assets:
        fewest, most = payoff.assets
        if len(assets) < fewest or (most is not None and len(assets) > most):
            wanted = f"{fewest} or more" if most is None else f"{fewest}"
            text = f"'{name}' takes {wanted} asset{'' if wanted == '1' else 's'}, found {len(assets)}"
            faults.append(Fault(body.get("assets").place, text))
            return None
    return payoff


def _terms_alone(definition: Document) -> Payoff | None:
    """The terms of a definition that is at fault elsewhere, so that their values can be read all the same."""
    said: list[Fault] = []
    terms = read_terms(definition.body.get("terms"), said)
    name = definition.body.get("payoff")
    return None if said else Payoff(name.text, "", terms, (), (), (), name.place)


def _start(node: Node) -> DayRef | Fault:
    day = date(node)
    return day if isinstance(day, Fault) else DayRef(node.place, date=day)


def _settlement(node: Node) -> Period | Fault:
    found = period(node)
    if isinstance(found, Fault) or found[1] != "business day":
        return expected("a number of business days, as '2 business days'", node)
    if found[0] > LONGEST_LAG:
        return expected(f"a lag of at most {LONGEST_LAG} business days", node)
    return Period(*found)


def _calendar(body: Mapping, key: str, faults: list[Fault]) -> BusinessDays | None:
    """`{holidays:, roll:}`, with `open:` where several lists are joined and `extra_holidays:` of its own."""
    before = len(faults)
    what = f"the {key.replace('_', ' ')}"
    mapping = mapping_of(body.get(key), faults, "'{holidays: ECB, roll: modified following}'")
    if mapping is None or not check_keys(mapping, ("open", "extra_holidays"), ("holidays", "roll"), faults, what):
        return None
    node = mapping.get("holidays")
    nodes = node.items if isinstance(node, Sequence) else (node,)
    names = tuple(value_of(each, word, faults) for each in nodes)
    roll = one_of(mapping.get("roll"), ROLLS, faults, "a roll convention")
    extra = [value_of(each, date, faults)
             for each in items_of(mapping.get("extra_holidays"), faults, "a list of dates, as '[2027-12-24]'")]
    opened = one_of(mapping.get("open"), OPEN, faults, "when a day is good") if "open" in mapping else None
    if not nodes:
        faults.append(expected("the name of a list of holidays, or several", node, "the list is empty"))
    elif len(nodes) > 1 and "open" not in mapping:
        faults.append(Fault(node.place, f"{what} names several lists; say when a day is good: 'open: in all' or "
                                        "'open: in any' of them"))
    elif len(nodes) == 1 and "open" in mapping:
        faults.append(Fault(mapping.key("open").place, f"{what} names one list only; leave out 'open'"))
    if len(nodes) > 1 and "none" in names:
        faults.append(Fault(nodes[names.index("none")].place, "'none' cannot be joined with lists of holidays"))
    if len(faults) > before:
        return None
    return BusinessDays(names, roll, node.place, tuple(each.place for each in nodes), opened == "in any", tuple(extra))


def _is_textbook(written: list[DayRef]) -> bool:
    """Times and no dates make a textbook contract."""
    return any(ref.time is not None for ref in written) and not any(ref.date for ref in written)


def _check_times(written: list[DayRef], textbook: bool, values: dict[str, TermValue],
                 faults: list[Fault]) -> None:
    """Calendar dates and times in one contract, and rules that do not fit the kind of contract."""
    first: datetime.date | None = next((ref.date for ref in written if ref.date), None)
    for ref in written:
        if ref.time is not None and first:
            text = f"this is a time, but the contract uses calendar dates, as {first}"
            faults.append(Fault(ref.place, text))
    for value in values.values():
        text = _unfit_rule(value, textbook) if isinstance(value, DayRule) else ""
        if text:
            faults.append(Fault(value.place, text))


def _unfit_rule(rule: DayRule, textbook: bool) -> str:
    """What is wrong with a rule in a contract of times or of dates, or ''."""
    if textbook and rule.every and rule.every.unit not in ("month", "year"):
        return (f"a step of {rule.every.unit}s needs calendar dates; with times write months or years, or "
                f"'{{count: 52, until: 1y}}'")
    if rule.end_of_month and (textbook or rule.every is None or rule.every.unit not in ("month", "year")):
        return "'end_of_month' goes with calendar dates and steps of months or years"
    if not textbook and rule.count is not None:
        return ("equal steps ('count') are for times; with calendar dates write '{from: ..., until: ..., "
                "every: 3 months}'")
    if not textbook and rule.start is None:
        return "'from' is missing in the date rule"
    return ""


def _is_dated(body: Mapping, textbook: bool, reader: TermReader) -> bool:
    """Whether the keys of a contract with calendar dates are asked for: not where the terms say times, nor where they
    say nothing that can be read and none of these keys is there."""
    if reader.written or any(key in body for key in CALENDAR_KEYS):
        return not textbook
    return not any(term.type in DATED_TYPES and term.name in reader.at_fault for term in reader.payoff.terms)


def _check_keys(body: Mapping, dated: bool, payoff: Payoff, faults: list[Fault]) -> None:
    """The keys of the contract: start, settlement and calendar stand in calendar contracts, and in no other; the day
    count where it is used."""
    check_keys(body, KEYS, (*REQUIRED, *(("start", "settlement", "calendar") if dated else ())), faults, "the contract",
               LATER)
    if not dated:
        for key in (*CALENDAR_KEYS, *PAST):
            if key in body:
                text = f"'{key}' belongs to contracts with calendar dates; this one uses times"
                faults.append(Fault(body.key(key).place, text))
    elif "day_count" not in body and uses_period(payoff) and not _is_meant(body, "day_count"):
        text = f"'day_count' is missing in the contract: '{payoff.name}' pays by 'period'"
        faults.append(Fault(body.place, text))


def _is_meant(body: Mapping, *keys: str) -> bool:
    """Whether a key of the contract that is not known is near one of these."""
    return any(did_you_mean(key, keys) for key in body.keys() if key not in KEYS)


def uses_period(payoff: Payoff) -> bool:
    """Whether anything in the definition goes by year fractions, so that a day count must be stated."""
    actions = [action for event in payoff.events for action in (*event.then, *event.otherwise)]
    formulas: list[Formula | None] = [let.formula for let in payoff.lets]
    formulas += [formula for running in payoff.running for formula in (running.formula, running.start)]
    formulas += [event.condition for event in payoff.events]
    formulas += [action.amount for action in actions if isinstance(action, Pay)]
    formulas += [action.which for action in actions if isinstance(action, Deliver)]
    formulas += [right for action in actions if isinstance(action, Assign) for _, right in action.values]
    parts = (part for formula in formulas if formula is not None for part in walk(formula))
    return any(isinstance(part, Name) and part.name == "period" for part in parts)


def _begun(payoff: Payoff, values: dict[str, TermValue]) -> Payoff:
    """The payoff with no `start` where that names an optional term that this contract does not state."""
    absent = {term.name for term in payoff.terms} - set(values)
    running = tuple(
        replace(one, start=None) if isinstance(one.start, Name) and one.start.name in absent else one
        for one in payoff.running
    )
    return replace(payoff, running=running)
