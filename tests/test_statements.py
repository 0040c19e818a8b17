"""What a contract states of its watches: statements that contradict each other, fixings or today's level, and how the
readback shows them."""

from __future__ import annotations

from pathlib import Path

import pytest
from front_door import mcx, written

import mcx as package
from mcx.faults import InputError

CASE = """payoff: watches
about: Watches of one asset and of two.
terms:
  watched: {type: watch}
  since:   {type: watch}
  expiry:  {type: date}
running:
  far: {ever: any(spot <= 70), at: watched}
  near: {ever: any(spot <= 80), at: watched}
  later: {ever: any(spot <= 80), at: since}
  up: {ever: any(spot >= 130), at: watched}
  out: {ever: any(spot < 60) or any(spot > 140), at: watched}
  safe: {always: all(spot / 100 > 85%), at: watched}
  low: {lowest: worst(spot) / 100, at: watched}
  high: {highest: best(spot), at: watched}
events:
  - at: expiry
    pay: "(1 if far or near or later or up or out or not safe else 2) + low + high * 0"
---
contract: watched
currency: EUR
units: 1
assets: [harbour]
start: 2026-12-01
settlement: 0 business days
calendar: {holidays: none, roll: following}
payoff: watches
terms: {watched: {continuous: [2026-12-01, expiry]}, since: {continuous: [2027-04-01, expiry]}, expiry: 2027-12-01}
happened:
STATED
---
market: 2027-06-01
rates: {EUR: 2%}
assets: {harbour: {spot: SPOT, currency: EUR, yield: 1%, vol: 20%}}
MORE
"""
SOUND = {"far": "2027-06-01: false", "near": "2027-06-01: false", "later": "2027-06-01: false",
         "up": "2027-06-01: false", "out": "2027-06-01: false", "safe": "2027-06-01: true",
         "low": "2027-06-01: 0.9", "high": "2027-06-01: 120"}
FIRST_LINE = 30  # of the statements


def case(tmp_path: Path, spot: float = 100, more: str = "", **stated: str) -> Path:
    said = "\n".join(f"  {name}: {{{text}}}" for name, text in (SOUND | stated).items())
    return written(tmp_path, CASE.replace("STATED", said).replace("SPOT", str(spot)).replace("MORE", more))


@pytest.mark.parametrize(("stated", "line", "words"), [
    ({"near": "2027-03-04: true, 2027-05-31: false", "safe": "2027-02-01: false", "low": "2027-06-01: 0.75"}, 1,
     "'near' is stated as false on 2027-05-31, and 'near' is stated as true on 2027-03-04"),
    ({"far": "2027-03-04: true", "safe": "2027-02-01: false", "low": "2027-06-01: 0.65"}, 1,
     "'near' is stated as false on 2027-06-01, and 'far' is stated as true on 2027-03-04"),
    ({"safe": "2027-02-01: false"}, 6,
     "'low' is stated as 0.9 on 2027-06-01, and 'safe' is stated as false on 2027-02-01"),
    ({"safe": "2027-02-01: false, 2027-03-01: true", "low": "2027-06-01: 0.85"}, 5,
     "'safe' is stated as true on 2027-03-01, and 'safe' is stated as false on 2027-02-01"),
    ({"low": "2027-03-01: 0.88, 2027-06-01: 0.9"}, 6,
     "'low' is stated as 0.9 on 2027-06-01, and 'low' is stated as 0.88 on 2027-03-01"),
    ({"high": "2027-03-01: 121, 2027-06-01: 120"}, 7,
     "'high' is stated as 120 on 2027-06-01, and 'high' is stated as 121 on 2027-03-01"),
    ({"up": "2027-03-01: true"}, 7, "'high' is stated as 120 on 2027-06-01, and 'up' is stated as true on 2027-03-01"),
    ({"low": "2027-06-01: 0.8", "safe": "2027-03-01: false"}, 6,
     "'near' is stated as false on 2027-06-01, and 'low' is stated as 0.8 on 2027-06-01"),
])
def test_statements_that_cannot_both_be_true(tmp_path: Path, stated: dict, line: int, words: str):
    """Of one watch on two dates, of two watches, of a flag and an extreme: the later line, with both statements."""
    with pytest.raises(InputError) as caught:
        package.price(case(tmp_path, **stated), paths=64)
    fault = next(fault for fault in caught.value.faults if words in fault.text)
    assert fault.text.endswith("both cannot be true; expected statements that agree")
    assert fault.place.line == FIRST_LINE + line and fault.place.column > 8
    assert all("cannot both" in each.text or "both cannot" in each.text for each in caught.value.faults)


@pytest.mark.parametrize("stated", [
    {},
    {"near": "2027-03-04: true", "safe": "2027-02-01: false", "low": "2027-06-01: 0.75"},  # before `later` begins
    {"near": "2027-03-04: false, 2027-05-04: true", "later": "2027-05-04: true", "safe": "2027-02-01: false",
     "low": "2027-03-04: 0.82, 2027-06-01: 0.8"},
    {"out": "2027-02-01: true", "up": "2027-02-01: true", "high": "2027-06-01: 150"},
    {"out": "2027-02-01: true", "far": "2027-02-01: true", "near": "2027-02-01: true", "safe": "2027-02-01: false",
     "low": "2027-06-01: 0.55"},
    {"low": "2027-06-01: 0.85", "safe": "2027-06-01: false"},  # at 85 it is not above it
])
def test_statements_that_agree(tmp_path: Path, stated: dict):
    """What is nearer may be reached without what is farther, and before a watch that begins later."""
    assert package.price(case(tmp_path, **stated), paths=64).price > 0.0


@pytest.mark.parametrize(("fixings", "stated", "words"), [
    ("2027-03-04: 79.5", {"safe": "2027-02-01: false", "low": "2027-06-01: 0.795"},
     "'near' is stated as false on 2027-06-01, which fixings contradict: harbour was fixed at 79.5 on 2027-03-04"),
    ("2027-02-01: 125", {}, "'high' is stated as 120 on 2027-06-01, which fixings contradict: harbour was fixed at"),
    ("2027-02-01: 84", {"low": "2027-06-01: 0.84"}, "'safe' is stated as true on 2027-06-01, which fixings contradict"),
    ("2027-02-01: 89", {"low": "2027-03-01: 0.9, 2027-06-01: 0.88"},
     "'low' is stated as 0.9 on 2027-03-01, which fixings contradict: harbour was fixed at 89 on 2027-02-01"),
])
def test_statements_that_fixings_contradict(tmp_path: Path, fixings: str, stated: dict, words: str):
    """The first fixing that says otherwise is named, and the fault stands at the statement."""
    with pytest.raises(InputError) as caught:
        package.price(case(tmp_path, more=f"fixings: {{harbour: {{{fixings}}}}}", **stated), paths=64)
    fault = next(fault for fault in caught.value.faults if words in fault.text)
    assert fault.place.line >= FIRST_LINE and fault.place.column > 8


def test_a_statement_that_todays_level_contradicts_is_warned_about(tmp_path: Path):
    """Not reached by the close of the valuation date, says the contract, while the spot stands beyond: every command
    says so, and that it counts as reached. A statement of the day before says nothing about today."""
    words = ("'near' is stated as false on 2027-06-01, but today's level of harbour, 79, has reached 80: the contract "
             "is valued as reached today; check the spot, or the statement")
    beyond = case(tmp_path, spot=79, safe="2027-06-01: false", low="2027-06-01: 0.82")
    assert words in package.price(beyond, paths=64).warnings
    assert words in package.readback(beyond).warnings
    assert words in package.greeks(beyond, paths=4096).warnings
    assert words.split(",")[0] in " ".join(mcx("price", beyond, "--paths", "64").out.split())
    eve = {name: "2027-05-31: false" for name in ("near", "later")}
    before = case(tmp_path, spot=79, safe="2027-06-01: false", low="2027-05-31: 0.82", **eve)
    assert not [text for text in package.price(before, paths=64).warnings if "has reached" in text]
    assert not [text for text in package.price(case(tmp_path), paths=64).warnings if "has reached" in text]


def test_the_readback_shows_what_was_stated(tmp_path: Path):
    """What, when, and that it was stated and not computed; in the words of the page and in the JSON."""
    file = case(tmp_path, near="2027-03-04: false, 2027-06-01: false")
    state = package.readback(file).state
    found = [(line.what, line.date, line.value) for line in state.stated]
    assert found[:3] == [("far", "2027-06-01", "no"), ("near", "2027-03-04", "no"), ("near", "2027-06-01", "no")]
    assert ("safe", "2027-06-01", "yes") in found and ("low", "2027-06-01", "0.9") in found and len(found) == 9
    shown = mcx("readback", file).out
    assert "stated by the contract, not computed: as of the close of the date" in shown
    assert ["2027-03-04", "near", "no"] in [line.split() for line in shown.splitlines()]
    as_json = package.readback(file).to_dict()["state"]["stated"]
    assert as_json[1] == {"date": "2027-03-04", "what": "near", "value": "no"}
