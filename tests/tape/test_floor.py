"""The certain minimum and maximum of what a contract pays: no path leaves them, and they are met where they can be."""

from __future__ import annotations

import math
from functools import cache
from pathlib import Path

import numpy as np
import pytest
from helpers import Ready, prepare, ready_of
from hypothesis import given
from random_payoffs import contracts

from mcx.checked.load import load
from mcx.leaves.market_map import MarketMap
from mcx.tape.floor import Certain, certain

EXAMPLES = sorted((Path(__file__).resolve().parents[2] / "payoffs" / "examples").glob("*.yaml"))
SEED = 0xC19BF174CF692694


@cache
def examples(path: Path, everything_drawn: bool = False) -> list[Ready]:
    request = load([path])
    return [ready_of(request, number, everything_drawn) for number in range(len(request.contracts))]


def bounds(ready: Ready) -> tuple[float, float]:
    found = certain(ready.dated, MarketMap(ready.market, ready.dated.contract).nodes())
    discount = MarketMap(ready.market, ready.dated.contract).funded_discount
    return found.least(discount).value, found.most(discount).value


def hold(ready: Ready, paths: int) -> None:
    least, most = bounds(ready)
    prices = ready.by_path(paths, SEED)["price"]
    slack = 1e-12 * np.maximum(1.0, np.abs(prices))
    assert (prices >= least - slack).all() and (prices <= most + slack).all()


@pytest.mark.parametrize("example", EXAMPLES, ids=lambda path: path.stem)
def test_no_path_of_an_example_leaves_the_bounds(example: Path):
    for ready in examples(example):
        hold(ready, 2048)


@given(contracts())
def test_no_path_of_payoffs_made_up_leaves_the_bounds(text: str):
    hold(prepare(text), 64)


@pytest.mark.parametrize(("example", "number"), [
    ("capital_protection", 0), ("capital_protection", 1), ("cliquet", 0), ("shark_fin", 0), ("digital", 0)])
def test_a_minimum_that_paths_meet_is_exact(example: str, number: int):
    ready = examples(next(path for path in EXAMPLES if path.stem == example), everything_drawn=True)[number]
    assert bounds(ready)[0] == pytest.approx(ready.by_path(4096, SEED)["price"].min(), rel=1e-12, abs=1e-15)


@pytest.mark.parametrize(("example", "number"), [
    ("autocall", 0), ("airbag", 0), ("barrier_reverse_convertible", 0), ("snowball_autocall", 0), ("bonus", 1)])
def test_a_maximum_that_paths_meet_is_exact(example: str, number: int):
    ready = examples(next(path for path in EXAMPLES if path.stem == example), everything_drawn=True)[number]
    assert bounds(ready)[1] == pytest.approx(ready.by_path(4096, SEED)["price"].max(), rel=1e-12)


def test_the_floor_of_a_reverse_convertible_is_its_coupons():
    """12 % a year in quarters whatever happens, the redemption down to nothing; discounted by hand."""
    ready = examples(next(path for path in EXAMPLES if path.stem == "reverse_convertible"))[0]
    found = certain(ready.dated, MarketMap(ready.market, ready.dated.contract).nodes())
    coupons = [payment for payment in found.payments() if payment.leg == "coupon"]
    assert [(payment.least, payment.most) for payment in coupons] == [(pytest.approx(0.03),) * 2] * 4
    assert found.least(lambda time: 1.0).value == pytest.approx(0.12)
    assert found.least(lambda time: 0.5).value == pytest.approx(0.06)
    assert found.most(lambda time: 1.0).value == pytest.approx(1.12)


NOTE = """\
payoff: callable_note
terms:
  fixings: {type: dates}
  level: {type: level}
let:
  above: worst(spot) >= worst(level)
events:
  - at: fixings.but_last
    name: called
    if: above
    then:
      - pay: 1 + 0.02 * nth
        as: redemption
      - end
  - at: fixings.last
    name: last
    if: above
    then:
      - pay: 1.2
        as: redemption
    else:
      - pay: 0.9
        as: redemption
      - pay: 0.04
        as: consolation
---
contract: Note
currency: EUR
notional: 1
assets: [north]
payoff: callable_note
terms:
  fixings: {count: 3, until: 3y}
  level: 100
---
market: 0y
rates: {EUR: 2%}
funding: {EUR: 0 bp}
assets:
  north: {spot: 100, currency: EUR, yield: 0%, vol: 20%}
"""


def note(text: str = NOTE) -> Certain:
    ready = prepare(text)
    return certain(ready.dated, MarketMap(ready.market, ready.dated.contract).nodes())


def test_a_note_that_is_called_does_not_lose_its_redemption():
    """Called it pays 1.02 or 1.04; at the end 1.2, or 0.9 and 0.04 together: never less than 0.94."""
    least = note().least(lambda time: 1.0)
    assert (least.value, least.ends) == (pytest.approx(0.94), None)
    assert note().most(lambda time: 1.0).value == pytest.approx(1.2)


def test_the_smallest_way_depends_on_the_discounts():
    """At 10 % a year an early 1.02 is worth more than a late 0.94, at -10 % less: 1.02 e^0.1 against 0.94 e^0.3."""
    at_ten, at_minus_ten = (note().least(lambda time: math.exp(-rate * time)) for rate in (0.1, -0.1))
    assert (at_ten.value, at_ten.ends) == (pytest.approx(0.94 * math.exp(-0.3)), None)
    assert (at_minus_ten.value, at_minus_ten.ends.time) == (pytest.approx(1.02 * math.exp(0.1)), 1.0)


def test_payments_that_may_not_be_owed_can_be_nothing():
    payments = note().payments()
    assert [(one.leg, one.decided.time, one.least, one.most) for one in payments] == [
        ("redemption", 1.0, 0.0, pytest.approx(1.02)), ("redemption", 2.0, 0.0, pytest.approx(1.04)),
        ("redemption", 3.0, 0.0, pytest.approx(1.2)), ("redemption", 3.0, 0.0, pytest.approx(0.9)),
        ("consolation", 3.0, 0.0, pytest.approx(0.04))]


def test_what_is_paid_unless_the_note_was_called_can_be_nothing():
    always = "  - at: fixings.{}\n    pay: 0.5\n    as: {}\n"
    text = NOTE.replace("events:\n", "events:\n" + always.format("first", "early")).replace(
        "---\ncontract", always.format("last", "late") + "---\ncontract", 1)
    ranges = {one.leg: (one.least, one.most) for one in note(text).payments()}
    assert ranges["early"] == (0.5, 0.5) and ranges["late"] == (0.0, 0.5)
    assert note(text).least(lambda time: 1.0).value == pytest.approx(0.5 + min(1.02, 0.94 + 0.5))


def test_a_contract_that_always_ends_goes_no_further():
    text = NOTE.replace("if: above\n    then:\n      - pay: 1 + 0.02 * nth", "if: worst(spot) >= 0\n    then:\n"
                                                                          "      - pay: 1 + 0.02 * nth")
    found = note(text)
    assert found.least(lambda time: 1.0).value == found.most(lambda time: 1.0).value == pytest.approx(1.02)
    assert [(one.least, one.most) for one in found.payments()] == [(pytest.approx(1.02),) * 2]


def test_what_has_no_bound_is_infinite():
    unbounded = NOTE.replace("pay: 1.2", "pay: worst(spot)").replace("pay: 0.9", "pay: -worst(spot)")
    assert note(unbounded).most(lambda time: 1.0).value == math.inf
    assert note(unbounded).least(lambda time: 1.0).value == pytest.approx(-100 + 0.04)
    owing = NOTE.replace("pay: 1.2", "pay: -worst(spot)")
    assert note(owing).least(lambda time: 1.0).value == -math.inf


HIT = """payoff: hit_or_end
terms:
  watched: {type: watch}
  expiry:  {type: date}
running:
  touched: {ever: any(spot <= 80), at: watched}
events:
  - at: {once: touched}
    if: true
    then: [{pay: AT_HIT}, end]
  - at: expiry
    pay: AT_END
---
contract: hit or end
currency: EUR
SIZED
payoff: hit_or_end
terms: TERMS
---
market: TODAY
rates: {EUR: RATES}
assets: {harbour: {spot: 100, currency: EUR, yield: 0%, vol: 40%}}
"""
TEXTBOOK = {"SIZED": "units: 1\nassets: [harbour]", "TERMS": "{watched: {continuous: [0y, 1y]}, expiry: 1y}",
            "TODAY": "0y"}
DATED = {"SIZED": "units: 1\nassets: [harbour]\nstart: 2026-12-01\nsettlement: 0 business days\n"
                  "calendar: {holidays: none, roll: following}",
         "TERMS": "{watched: {continuous: [2026-12-01, 2027-12-01]}, expiry: 2027-12-01}", "TODAY": "2026-12-01"}


@pytest.mark.parametrize("how", [TEXTBOOK, DATED], ids=["textbook", "dated"])
@pytest.mark.parametrize(("rates", "at_hit", "at_end", "least", "most"), [
    ("-10%", 1, 1, 1.0, math.exp(0.1)),     # sooner is less: a hit at once
    ("10%", 1, 1, math.exp(-0.1), 1.0),
    ("-10%", -1, 0, -math.exp(0.1), 0.0),   # owed by the holder: later is more
    ("{6m: 5%, 1y: -1%}", 1, 2, math.exp(-0.025), 2 * math.exp(0.01)),   # least between the ends, at the node
    ("{6m: -5%, 1y: 1%}", 1, 0.5, 0.5 * math.exp(-0.01), math.exp(0.025)),
])
def test_the_floor_of_a_hit_under_negative_rates(how: dict, rates: str, at_hit: float, at_end: float, least: float,
                                                 most: float):
    """An amount paid at the hit is worth least and most where the discount factor is: under negative rates at the first
    moment, and at a node of the curve where it turns there; no path leaves these bounds."""
    text = HIT.replace("AT_HIT", str(at_hit)).replace("AT_END", str(at_end)).replace("RATES", rates)
    for old, new in how.items():
        text = text.replace(old, new)
    ready = prepare(text)
    found = bounds(ready)
    assert found == pytest.approx((least, most), rel=2e-3 if how is DATED else 1e-12)  # 6m is no day of its own
    hold(prepare(text, everything_drawn=True), 2**14)
    prices = prepare(text, everything_drawn=True).by_path(2**14, SEED)["price"]
    assert prices.min() - found[0] < 0.03 and found[1] - prices.max() < 0.03
