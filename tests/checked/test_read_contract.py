"""Contract documents: terms filled in by type, and what is refused at which place with which words."""

from __future__ import annotations

from datetime import date

import pytest

from mcx.checked.contract import Contract, DayList, DayRef, DayRule, Figures, Period, Stretch, Word
from mcx.checked.library import Definitions
from mcx.checked.read_contract import read_contract
from mcx.text.documents import parse_documents

DEFINITION = """\
payoff: sampler
about: One term of each type.
terms:
  initial:    {type: level}
  dates:      {type: dates}
  paid_on:    {type: dates, per: dates, optional: true}
  barrier:    {type: percent, per: dates, at_least: 0%, below: 200%}
  weights:    {type: number, per: assets, above: 0, at_most: 10}
  first_call: {type: date}
  watched:    {type: watch}
  side:       {type: choice, of: [call, put]}
  memory:     {type: flag, default: false}
  payer:      {type: asset, optional: true}
  cap:        {type: percent, optional: true}
running:
  hit: {ever: worst(spot / initial) < 50%, at: watched}
events:
  - at: dates
    from: first_call
    if: basket(spot / initial, weights) > barrier and not hit
    then:
      - pay: period
        due: paid_on
"""
WHOLE = """\
contract: Harbour and Lantern sampler
currency: EUR
notional: 1000000
assets: [harbour, lantern]
start: 2026-11-16
day_count: 30/360
settlement: 2 business days
calendar: {holidays: ECB, roll: modified following}
payoff: sampler
terms:
  initial: {lantern: 812.40, harbour: 4210.50}
  dates: {from: 2027-02-16, until: 2027-08-16, every: 3 months}
  paid_on: [2027-02-18, 2027-05-19, 2027-08-18]
  barrier: [100%, 95%, 90%]
  weights: [0.6, 40%]
  first_call: 2027-05-16
  watched: {continuous: [2026-12-01, dates.last]}
  side: call
  payer: lantern
"""
TEXTBOOK = """\
contract: Sampler in years
currency: EUR
units: 10
assets: [harbour]
payoff: sampler
terms:
  initial: 100
  dates: {count: 4, until: 1y}
  barrier: 90%
  weights: 100%
  first_call: 0.5y
  watched: dates
  side: put
  memory: true
"""


def parsed(text: str, definition: str = DEFINITION) -> tuple[Contract | None, list[str]]:
    own, faults = parse_documents(definition.encode(), "d.yaml")
    (document,), wrong = parse_documents(text.encode(), "c.yaml")
    assert faults + wrong == []
    contract, faults = read_contract(document, Definitions(own))
    assert contract is not None or faults
    return contract, [str(fault) for fault in sorted(faults)]


def faults_of(old: str, new: str, whole: str = WHOLE) -> list[str]:
    """The faults of the whole contract with one text put in place of another."""
    assert whole.count(old) == 1
    return parsed(whole.replace(old, new))[1]


def test_a_whole_contract():
    """Every term becomes a value of its type, in the contract's order of assets, with its place."""
    contract, faults = parsed(WHOLE)
    assert faults == []
    assert (contract.title, contract.currency, contract.size) == ("Harbour and Lantern sampler", "EUR", 1e6)
    assert contract.start.date == date(2026, 11, 16)
    assert contract.settlement == Period(2, "business day")
    assert (contract.calendar.holidays, contract.calendar.roll) == (("ECB",), "modified following")
    assert str(contract.calendar.place) == "c.yaml:8:22"
    terms = contract.terms
    assert terms["initial"].rows == ((4210.5, 812.4),)
    assert terms["initial"].per_asset
    assert isinstance(terms["dates"], DayRule)
    assert terms["dates"].every == Period(3, "month")
    assert [ref.date.day for ref in terms["paid_on"].days] == [18, 19, 18]
    assert terms["barrier"].rows == ((1.0,), (0.95,), (0.9,))
    assert terms["barrier"].per_date
    assert terms["weights"].rows == ((0.6, 0.4),)
    assert terms["first_call"].date == date(2027, 5, 16)
    assert isinstance(terms["watched"], Stretch)
    assert (terms["watched"].end.term, terms["watched"].end.part) == ("dates", "last")
    assert (terms["side"].text, terms["payer"].text) == ("call", "lantern")
    assert str(terms["side"].place) == "c.yaml:18:9"


def test_defaults_are_filled_in_and_optional_terms_stay_out():
    """A default is read as if the contract had written it; an optional term that is not stated is absent."""
    contract, _ = parsed(WHOLE)
    assert contract.terms["memory"] == Word("false", contract.terms["memory"].place)
    assert contract.terms["memory"].place.file == "d.yaml"
    assert "cap" not in contract.terms


def test_a_textbook_contract():
    """Times instead of dates make a textbook contract, which states no start, calendar or settlement."""
    contract, faults = parsed(TEXTBOOK)
    assert faults == []
    assert contract.textbook
    assert (contract.start, contract.calendar, contract.settlement) == (None, None, None)
    assert contract.size == 10
    assert contract.terms["dates"].count == 4
    assert isinstance(contract.terms["watched"], DayList)
    assert contract.terms["first_call"] == DayRef(contract.terms["first_call"].place, time=0.5)


def test_levels_and_lists():
    """A level stands for all assets or is listed in their order; a list for each date may hold one for
    each asset."""
    definition = DEFINITION.replace("{type: level}", "{type: level, per: dates}")
    contract, faults = parsed(WHOLE.replace("{lantern: 812.40, harbour: 4210.50}",
                                            "[4210.5, [1, 2], {lantern: 3, harbour: 4}]"),
                                                                                    definition)
    assert faults == []
    assert contract.terms["initial"].rows == ((4210.5, 4210.5), (1, 2), (4, 3))
    contract, _ = parsed(WHOLE.replace("{lantern: 812.40, harbour: 4210.50}", "100"))
    assert contract.terms["initial"] == Figures(((100.0,),), contract.terms["initial"].place)


def test_a_start_that_is_not_stated():
    """A running value whose `start` is an optional term begins with its first date where that is not
    stated."""
    definition = DEFINITION.replace("at: watched}",
                                    "at: watched}\n  high: {highest: worst(spot), at: dates, start: cap}")
    contract, _ = parsed(WHOLE, definition)
    assert contract.payoff.running[1].start is None
    contract, _ = parsed(WHOLE + "  cap: 120%\n", definition)
    assert contract.payoff.running[1].start is not None


SLIPS = [
    # the contract itself
    ("currency: EUR", "currency: euro",
     "2:11: expected a currency code of three capital letters, as 'EUR', found 'euro'"),
    ("currency: EUR", "curency: EUR",
     "2:1: 'curency' is not a key of the contract; did you mean 'currency'?"),
    ("currency: EUR\n", "", "1:1: 'currency' is missing in the contract"),
    ("notional: 1000000\n", "",
     "1:1: 'notional' (payments are multiples of it) or 'units' (payments are money per unit) is missing in "
     "the contract"),
    ("notional: 1000000", "notional: 1\nunits: 1",
     "4:1: a contract has 'notional' (payments are multiples of it) or 'units' (payments are money per "
     "unit), not both"),
    ("1000000", "-1", "3:11: expected an amount above 0, found '-1'"),
    ("1000000", "1,000,000", "3:11: expected a number, found '1,000,000'; write '1000000'"),
    ("[harbour, lantern]", "harbour", "4:9: expected a list of assets, as '[harbour]', found 'harbour'"),
    ("[harbour, lantern]", "[harbour, lantern, harbour]", "4:28: 'harbour' stands twice in 'assets'"),
    ("[harbour, lantern]", "[]", "4:9: expected one asset or more, found a list; the list is empty"),
    ("[harbour, lantern]", "[harbour, lan/tern]",
     "4:19: expected the name of an asset, of letters, digits and . _ - &, found 'lan/tern'"),
    ("[harbour, lantern]", "[harbour lantern]",
     "4:10: expected the name of an asset, of letters, digits and . _ - &, found 'harbour lantern'"),
    ("start: 2026-11-16", "start: 16.11.2026",
     "5:8: expected a date such as '2026-11-16', found '16.11.2026'; write '2026-11-16'"),
    ("start: 2026-11-16\n", "", "1:1: 'start' is missing in the contract"),
    ("day_count: 30/360\n", "", "1:1: 'day_count' is missing in the contract: 'sampler' pays by 'period'"),
    ("30/360", "30/365",
     "6:12: expected a day count: 'Actual/Actual (ISDA)', 'Actual/Actual (ICMA)', 'Actual/365 (Fixed)', "
     "'Actual/360', '30/360', '30E/360' or '30E/360 (ISDA)', found '30/365'"),
    ("30/360", "ACT/364",
     "6:12: expected a day count: 'Actual/Actual (ISDA)', 'Actual/Actual (ICMA)', 'Actual/365 (Fixed)', "
     "'Actual/360', '30/360', '30E/360' or '30E/360 (ISDA)', found 'ACT/364'"),
    ("30/360", "ACT/365",
     "6:12: expected a day count: 'Actual/Actual (ISDA)', 'Actual/Actual (ICMA)', 'Actual/365 (Fixed)', "
     "'Actual/360', '30/360', '30E/360' or '30E/360 (ISDA)', found 'ACT/365'; did you mean 'Actual/365 (Fixed)'?"),
    ("2 business days", "2 days",
     "7:13: expected a number of business days, as '2 business days', found '2 days'"),
    ("2 business days", "9999 business days",
     "7:13: expected a lag of at most 250 business days, found '9999 business days'"),
    ("[harbour, lantern]", "[[], {}, harbour]",
     "4:10: expected the name of an asset, of letters, digits and . _ - &, found a list",
     "4:14: expected the name of an asset, of letters, digits and . _ - &, found a mapping"),
    ("settlement: 2 business days\n", "", "1:1: 'settlement' is missing in the contract"),
    ("roll: modified following", "roll: modified", "8:33: expected a roll convention: 'following', 'modified "
                                                   "following' or 'preceding', found 'modified'; did you "
                                                   "mean 'modified following'?"),
    ("holidays: ECB, ", "", "8:11: 'holidays' is missing in the calendar"),
    ("payoff: sampler", "payoff: sampller", "9:9: there is no payoff 'sampller'; did you mean 'sampler'?"),
    ("day_count: 30/360", "day_count: 30/360\nhappened: {hit: true}",
     "7:17: expected what happened by date, as 'hit: {2027-03-04: true}', found 'true'"),
    # terms by name
    ("  side: call\n", "", "11:3: 'side' is missing in the terms of 'sampler'"),
    ("  side: call", "  syde: call",
     "18:3: 'syde' is not a key of the terms of 'sampler'; did you mean 'side'?"),
    # numbers
    ("812.40", "-812.40", "11:22: expected an amount above 0, found '-812.40'"),
    ("{lantern: 812.40, harbour: 4210.50}", "100%",
     "11:12: expected an amount of money, found '100%'; write it without a unit"),
    ("{lantern: 812.40,", "{latern: 812.40,",
     "11:13: 'latern' is not a key of 'initial', which goes by asset; did you mean 'lantern'?"),
    ("{lantern: 812.40, harbour: 4210.50}", "{harbour: 4210.50}",
     "11:12: 'lantern' is missing in 'initial', which goes by asset"),
    ("{lantern: 812.40, harbour: 4210.50}", "[1, 2, 3]",
     "11:12: 'initial' has 3 numbers for 2 assets: 'harbour' and 'lantern'"),
    ("[100%, 95%, 90%]", "70", "14:12: expected a percentage with its unit, found '70'; write '70%'"),
    ("[100%, 95%, 90%]", "[100%, 0.95, 90%]",
     "14:19: expected a percentage with its unit, found '0.95'; write '95%' or '0.95%'"),
    ("[100%, 95%, 90%]", "-5%", "14:12: 'barrier' must be at least 0%, found '-5%'"),
    ("[100%, 95%, 90%]", "200%", "14:12: 'barrier' must be below 200%, found '200%'"),
    ("[100%, 95%, 90%]", "{harbour: 90%, lantern: 80%}",
     "14:12: expected one number, or a list with one for each date of 'dates', found a mapping"),
    ("[100%, 95%, 90%]", "[]",
     "14:12: expected one number for each date of 'dates', found a list; the list is empty"),
    ("[0.6, 40%]", "[0, 40%]", "15:13: 'weights' must be above 0, found '0'"),
    ("[0.6, 40%]", "10.5", "15:12: 'weights' must be at most 10, found '10.5'"),
    ("[0.6, 40%]", "nan", "15:12: expected a finite number, found 'nan'"),
    # words
    ("side: call", "side: caal",
     "18:9: expected 'side' to be: 'call' or 'put', found 'caal'; did you mean 'call'?"),
    ("side: call", "side: call\n  memory: yes", "19:11: expected true or false, found 'yes'; write true"),
    ("payer: lantern", "payer: latern",
     "19:10: expected 'payer' to be: 'harbour' or 'lantern', found 'latern'; did you mean 'lantern'?"),
    # dates
    ("first_call: 2027-05-16", "first_call: 2027-02-29",
     "16:15: expected a day of the calendar, found '2027-02-29'"),
    ("first_call: 2027-05-16", "first_call: soon",
     "16:15: expected a date such as '2026-11-16', a time such as '0.25y' or the name of another date term, "
     "found 'soon'"),
    ("first_call: 2027-05-16", "first_call: dates",
     "16:15: 'dates' has several dates; expected one, as 'dates.first' or 'dates.last'"),
    ("first_call: 2027-05-16", "first_call: dates.lst",
     "16:15: '.lst' is no part of 'dates'; did you mean 'last'?"),
    ("first_call: 2027-05-16", "first_call: [2027-05-16]",
     "16:15: expected a date such as '2026-11-16', a time such as '0.25y' or the name of another date term, "
     "found a list"),
    ("first_call: 2027-05-16", "first_call: 0.5y",
     "16:15: this is a time, but the contract uses calendar dates, as 2027-02-16"),
    ("until: 2027-08-16, every: 3 months", "until: 2027-08-16, evry: 3 months",
     "12:48: 'evry' is not a key of the date rule 'dates'; did you mean 'every'?"),
    (", every: 3 months", "", "12:10: 'every' is missing in the date rule 'dates'"),
    ("every: 3 months", "every: 3 month ends",
     "12:55: expected a period such as '3 months' or '1 business day', found '3 month ends'"),
    ("every: 3 months", "every: 0 months", "12:55: expected a step of at least 1, found '0 months'"),
    ("every: 3 months", "count: 3", "12:10: equal steps ('count') are for times; with calendar dates write "
                                    "'{from: ..., until: ..., every: 3 months}'"),
    ("every: 3 months", "every: 3 months, count: 3",
     "12:65: the date rule 'dates' has both 'every' and 'count'; keep one"),
    ("{from: 2027-02-16, until", "{until", "12:10: 'from' is missing in the date rule"),
    ("{from: 2027-02-16, until: 2027-08-16, every: 3 months}", "{continuous: [2027-02-16, 2027-08-16]}",
     "12:11: 'dates' is a list of dates; only a watch term can be continuous"),
    ("first_call: 2027-05-16", "first_call: 6.5.2027",
     "16:15: expected a date such as '2026-11-16', a time such as '0.25y' or the name of another date term, "
     "found '6.5.2027'; write '2027-05-06'"),
    ("{continuous: [2026-12-01, dates.last]}", "continuously",
     "17:12: expected dates, a rule of dates, the name of another date term, or '{continuous: [from, until]}', "
     "found 'continuously'"),
    ("[2027-02-18, 2027-05-19, 2027-08-18]", "quarterly",
     "13:12: expected dates such as '[2026-11-16, 2027-05-17]', a rule such as '{from: 2026-11-16, until: 2027-11-16, "
     "every: 3 months}', or the name of another date term, found 'quarterly'"),
    ("812.40", "812,40", "11:22: expected a number, found '812,40'; write '812.40'"),
    ("[2026-12-01, dates.last]", "[2026-12-01]",
     "17:25: expected two dates, as in '{continuous: [from, until]}', found a list"),
    ("[2027-02-18, 2027-05-19, 2027-08-18]", "[]",
     "13:12: expected one date or more, found a list; the list is empty"),
    ("[2027-02-18, 2027-05-19, 2027-08-18]", "watched",
     "13:12: 'watched' is watched continuously and has no list of dates"),
]


@pytest.mark.parametrize("slip", SLIPS, ids=[slip[1] for slip in SLIPS])
def test_slips(slip: tuple[str, ...]):
    """Each slip gives its fault and no other, at its place, in words that say what was expected."""
    old, new, *expected = slip
    assert faults_of(old, new) == [f"c.yaml:{fault}" for fault in expected]


@pytest.mark.parametrize(
    ("old", "new", "expected"),
    [
        ("payoff:", "start: 2026-12-01\npayoff:",
         "5:1: 'start' belongs to contracts with calendar dates; this one uses times"),
        ("payoff:", "settlement: 2 business days\npayoff:",
         "5:1: 'settlement' belongs to contracts with calendar dates; this one uses times"),
        ("{count: 4, until: 1y}", "{from: 0y, until: 1y, every: 1 business day}",
         "8:10: a step of business days needs calendar dates; with times write months or years, or '{count: "
         "52, until: 1y}'"),
        ("count: 4", "count: 4.5", "8:18: expected a whole number of steps from 1 to 10000, found '4.5'"),
        ("count: 4", "count: 1000000",
         "8:18: expected a whole number of steps from 1 to 10000, found '1000000'"),
        ("0.5y", "26w", "11:15: expected a time in years or months such as '0.25y' or '3m', found '26w'"),
        ("watched: dates", "watched: paid_on", "12:12: 'paid_on' is not stated in this contract"),
    ],
)
def test_slips_in_textbook_contracts(old: str, new: str, expected: str):
    """A textbook contract uses times only."""
    assert faults_of(old, new, TEXTBOOK) == [f"c.yaml:{expected}"]


def test_the_number_of_assets_must_fit():
    """A definition for one asset refuses two, at the contract's assets."""
    _, faults = parsed(WHOLE, DEFINITION.replace("terms:", "assets: 1\nterms:"))
    assert faults == ["c.yaml:4:9: 'sampler' takes 1 asset, found 2"]
    _, faults = parsed(WHOLE, DEFINITION.replace("terms:", "assets: 3 or more\nterms:"))
    assert faults == ["c.yaml:4:9: 'sampler' takes 3 or more assets, found 2"]


def test_all_faults_at_once():
    """Faults of the contract and of its terms come together, in order of place."""
    text = WHOLE.replace("EUR", "euro").replace("4210.50", "0").replace("95%", "95").replace("side: call",
                                                                                             "side: x")
    assert [fault.split(": ")[0] for fault in parsed(text)[1]] == [
        "c.yaml:2:11", "c.yaml:11:39", "c.yaml:14:19", "c.yaml:18:9"]


def test_a_misspelt_key_is_not_missing_as_well():
    """One slip, one fault: what was misspelt is known to be meant."""
    for old, new in (("start", "strat"), ("settlement", "setlement"), ("calendar", "calender"),
                     ("notional", "notionl"), ("day_count", "daycount")):
        (fault,) = faults_of(f"\n{old}:", f"\n{new}:")
        assert fault.endswith(f"'{new}' is not a key of the contract; did you mean '{old}'?")


def test_terms_without_any_date_that_can_be_read():
    """Where no date can be read and no key tells, it is not known that the contract goes by the calendar."""
    text = TEXTBOOK.replace("{count: 4, until: 1y}", "{count: 4, until: 1yr}").replace("0.5y", "half a year")
    assert [fault.split(": ")[0] for fault in parsed(text.replace("watched: dates", "watched: 1 y"))[1]] == [
        "c.yaml:8:28", "c.yaml:11:15", "c.yaml:12:12"]


def test_what_could_be_read_of_a_contract_at_fault():
    """The dates of a contract stay readable beside a fault elsewhere; it says which terms have no value."""
    contract, faults = parsed(WHOLE.replace("side: call", "side: caal"))
    assert len(faults) == 1
    assert contract.at_fault == {"side"} and contract.framed
    contract, _ = parsed(WHOLE.replace("side: call", "syde: call"))
    assert contract.at_fault == {"side", "cap"}  # the misspelt term may have been either
    contract, _ = parsed(WHOLE.replace("start: 2026-11-16", "start: soon"))
    assert contract.at_fault == frozenset() and not contract.framed
    assert parsed(WHOLE)[0].framed


def test_faults_of_the_definition_are_told_too():
    """A contract on a definition at fault is refused with the definition's faults at their places."""
    _, faults = parsed(WHOLE, DEFINITION.replace("pay: period", "pay: perriod"))
    assert faults == ["d.yaml:22:14: there is no 'perriod' here; did you mean 'period'?"]


def test_terms_are_read_beside_faults_of_the_definition():
    """A definition that is at fault in its events still says which terms there are, and of which type."""
    text = WHOLE.replace("[100%, 95%, 90%]", "70").replace("side: call", "syde: call")
    contract, faults = parsed(text, DEFINITION.replace("pay: period", "pay: perriod"))
    assert contract.payoff.events == ()
    assert [fault.split(": ")[0] for fault in faults] == ["c.yaml:14:12", "c.yaml:18:3", "d.yaml:22:14"]
    _, faults = parsed(text, DEFINITION.replace("{type: flag, default: false}", "{type: flg}"))
    assert [fault.split(": ")[0] for fault in faults] == ["d.yaml:12:22"]  # the terms themselves are at fault


def test_what_stands_there_already_is_not_offered():
    """For a term that is not known, only those that are still blank are offered."""
    assert faults_of("  watched: {", "  barrier_watched: {") == [
        "c.yaml:17:3: 'barrier_watched' is not a key of the terms of 'sampler'; did you mean 'watched'?"]
    every = ("'initial', 'dates', 'barrier', 'weights', 'first_call', 'watched', 'side', 'paid_on', 'memory', 'payer' "
             "or 'cap'")
    assert faults_of("  side: call", "  side: call\n  zzz: 1") == [
        f"c.yaml:19:3: 'zzz' is not a key of the terms of 'sampler'; expected {every}"]
    assert faults_of("  side: call", "  zzz: call") == [
        "c.yaml:11:3: 'side' is missing in the terms of 'sampler'",
        "c.yaml:18:3: 'zzz' is not a key of the terms of 'sampler'; expected 'side'"]


def test_money_per_unit_takes_no_notional():
    """A strike of 100 times a notional would be an amount of nothing; where the definition does not say what it pays
    either is taken."""
    money, multiples = (DEFINITION.replace("terms:", f"pays: {what}\nterms:", 1)
                        for what in ("money per unit", "multiples of the notional"))
    units = WHOLE.replace("notional: 1000000", "units: 10")
    assert parsed(WHOLE, money)[1] == [
        "c.yaml:3:1: 'sampler' pays money per unit, which goes with 'units', not with 'notional'"]
    assert parsed(units, multiples)[1] == [
        "c.yaml:3:1: 'sampler' pays multiples of the notional, which goes with 'notional', not with 'units'"]
    for text, definition in ((units, money), (units, DEFINITION), (WHOLE, multiples), (WHOLE, DEFINITION)):
        assert parsed(text, definition)[1] == []
