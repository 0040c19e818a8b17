"""What the past must be known for: whatever is missing of it, all of that is told at once and nothing else."""

from __future__ import annotations

from dataclasses import replace
from datetime import date
from itertools import combinations, product

import pytest
from helpers import request_of

from mcx.dates.dating import date_on
from mcx.tape.unroll import unroll

DATES = (date(2026, 12, 1), date(2026, 12, 8), date(2027, 3, 1))  # the initial fixings, a coupon
ASSETS = ("harbour", "lantern")
RATE = "EUR per USD"
LEVELS = {("harbour", DATES[0]): 100.0, ("harbour", DATES[1]): 101.0, ("harbour", DATES[2]): 97.0,
          ("lantern", DATES[0]): 50.0, ("lantern", DATES[1]): 51.5, ("lantern", DATES[2]): 49.0,
          (RATE, DATES[0]): 0.9, (RATE, DATES[1]): 0.92, (RATE, DATES[2]): 0.91}
INITIALS = {
    "number": ("{harbour: 100, lantern: 50}", ()),
    "fixing": ("{fixing: 2026-12-08}", DATES[1:2]),
    "average": ("{average: [2026-12-01, 2026-12-08]}", DATES[:2]),
    "lowest": ("{lowest: [2026-12-01, 2026-12-08]}", DATES[:2]),
    "highest": ("{highest: [2026-12-01, 2026-12-08]}", DATES[:2]),
}
WATCHES = {"at the end": "observations.last", "on dates": "observations",
           "all the time": "{continuous: [2026-12-08, 2027-09-01]}"}
NOTE = """contract: note
currency: EUR
notional: 1000
assets: [harbour, lantern]
start: 2026-12-01
settlement: 2 business days
calendar: {holidays: none, roll: following}
CONVERSIONHAPPENEDpayoff: autocall
terms:
  initial: INITIAL
  observations: {from: 2027-03-01, until: 2027-09-01, every: 3 months}
  first_call: observations.last
  call_barrier: 100%
  coupon_barrier: 80%
  coupon: 2%
  memory: true
  knock_in: 60%
  watched: WATCHED
  strike: 100%
---
market: 2027-03-15
rates: {EUR: 2%, USD: 3%}
funding: {EUR: 1%}
assets:
  harbour: {spot: 92, currency: EUR, yield: 1%, vol: 20%}
  lantern: {spot: 47, currency: LANTERN, yield: 2%, vol: 25%}
correlation: {harbour/lantern: 50%RATES}
"""


def note(initial: str, watch: str, composite: bool, stated: bool) -> str:
    """The documents without fixings."""
    rates = ", harbour/EUR per USD: 0%, lantern/EUR per USD: 0%}\nfx: {EUR per USD: {spot: 0.9, vol: 8%}"
    return (NOTE.replace("INITIAL", INITIALS[initial][0]).replace("WATCHED", WATCHES[watch])
            .replace("CONVERSION", "conversion: {lantern: composite}\n" if composite else "")
            .replace("HAPPENED", "happened: {hit: {2027-03-15: false}}\n" if stated else "")
            .replace("LANTERN", "USD" if composite else "EUR").replace("RATES", rates if composite else ""))


@pytest.mark.parametrize(("watch", "stated", "composite"), [
    ("at the end", False, False), ("on dates", False, False), ("all the time", True, False),
    ("all the time", False, False), ("on dates", False, True), ("all the time", True, True),
    ("all the time", False, True)])
@pytest.mark.parametrize("initial", INITIALS)
def test_all_that_is_missing_is_told_at_once(initial: str, watch: str, stated: bool, composite: bool):
    """Assets and a rate of exchange x dates x kinds of initial level x kinds of watch x what the contract states: every
    set of missing fixings (where many are needed: of up to two) gives one fault for each name with its dates,
    and what must be stated of the watch besides."""
    request = request_of(note(initial, watch, composite, stated))
    contract, market = request.contracts[0], request.market
    needed = {(name, day) for (name, day) in LEVELS if (name != RATE or composite)
              and day in (*INITIALS[initial][1], DATES[2])}
    counts = range(len(needed) + 1) if len(needed) < 7 else (0, 1, 2, len(needed))
    for gone in (set(each) for count in counts for each in combinations(sorted(needed), count)):
        levels = {name: {day: LEVELS[name, day] for day in DATES if (name, day) not in gone}
                  for name in (*ASSETS, RATE)}
        dated, faults = date_on(contract, replace(market, fixings=levels))
        assert not faults
        found = [fault.text for fault in unroll(dated, nodes=()).faults]
        expected = []
        for name in (*ASSETS, RATE):
            dates = [str(day) for day in DATES if (name, day) in gone]
            if dates:
                expected.append(f"'note' needs a fixing of '{name}' on {', '.join(dates[:-1])}"
                                f"{' and ' if len(dates) > 1 else ''}{dates[-1]}")
        told = [text for text in found if "needs a fixing" in text]
        assert sorted(told) == sorted(expected), gone
        others = [text for text in found if text not in told]
        if watch == "all the time" and not stated:
            (other,) = others
            assert "the contract must say what had happened by 2027-03-12 or 2027-03-15" in other
        else:
            assert not others


def told(text: str) -> list[str]:
    """The faults of the only contract of a text."""
    request = request_of(text)
    dated, faults = date_on(request.contracts[0], request.market)
    assert not faults
    return [fault.text for fault in unroll(dated, nodes=()).faults]


def test_yesterdays_fixing_is_asked_for_and_todays_is_not():
    """The day before the valuation date is of the past, the day itself not yet."""
    text = note("number", "at the end", composite=False, stated=False)
    assert told(text.replace("market: 2027-03-15", "market: 2027-03-02")) == [
        f"'note' needs a fixing of '{name}' on 2027-03-01" for name in ASSETS]
    assert told(text.replace("market: 2027-03-15", "market: 2027-03-01")) == []


def test_what_a_watch_from_today_is_held_against_must_be_fixed():
    """A number, not the spot that stands for today's level elsewhere; one that is still to come is refused as such."""
    text = note("average", "all the time", composite=False, stated=False)
    early = text.replace("market: 2027-03-15", "market: 2026-12-08")
    assert told(early + "fixings: {harbour: {2026-12-01: 100, 2026-12-08: 101}}\n") == [
        "'note' needs a fixing of 'lantern' on 2026-12-01 and 2026-12-08"]
    both = "fixings: {harbour: {2026-12-01: 100, 2026-12-08: 101}, lantern: {2026-12-01: 50, 2026-12-08: 51}}\n"
    assert told(early + both) == []
    (found,) = told(text.replace("market: 2027-03-15", "market: 2026-12-07") + both)
    assert "'initial' is no number before its last fixing, on 2026-12-08" in found


def test_a_watch_that_lacks_numbers_hides_no_other_fixing():
    """What hangs on it, or on what must be stated of it, is looked at as well."""
    text = note("average", "all the time", composite=False, stated=False).replace(
        "payoff: autocall", "payoff: shown").replace("contract: note", (
            "payoff: shown\nterms: {initial: {type: level}, watched: {type: watch}, seen: {type: dates}}\n"
            "running:\n  hit: {ever: worst(spot / initial) < 60%, at: watched}\nevents:\n"
            "  - {at: seen, if: hit, then: [pay: worst(spot)]}\n---\ncontract: note"))
    start, end = text.index("  observations:"), text.index("  watched: {cont")
    text = text[:start] + "  seen: [2027-03-01, 2027-09-01]\n" + text[end:]
    text = text.replace("  strike: 100%\n", "").replace("settlement: 2", "settlement: 60")
    assert sorted(told(text))[1:] == [f"'note' needs a fixing of '{name}' on 2026-12-01, 2026-12-08 and 2027-03-01"
                                      for name in ASSETS]
