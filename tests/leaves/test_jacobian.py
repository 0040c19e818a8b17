"""Derivatives of the leaves by every number of a market document."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from helpers import Ready, document, prepare, request_of
from mcx.leaves.jacobian import Input, inputs, jacobian, moved, without_derivative
from mcx.leaves.market_map import MarketMap

MARKET = """market: 0y
rates: {EUR: {discount_factors: {6m: 0.99, 2y: 0.955}}}
funding: {EUR: {1y: 50 bp, 3y: 90 bp}}
assets:
  harbour: {spot: 100, currency: EUR, yield: {6m: 1.5%, 2y: 2%}, vol: {3m: 17%, 1y: 18%, 3y: 21%}}
  lantern: {spot: 52.5, currency: EUR, forwards: {1y: 53.1, 2y: 54}, vol: {1y: 31%, 2y: 27%}}
  orchard: {spot: 80, currency: EUR, yield: 0%, vol: 24%}
correlation: {harbour/lantern: 40%, orchard/harbour: -20%, lantern/orchard: 10%}
"""
CONTRACT = document("basket_option", "[harbour, lantern, orchard]", side="call", strike="100%",
                    weights="{harbour: 0.3, lantern: 0.3, orchard: 0.4}",
                    initial="{harbour: 100, lantern: 50, orchard: 80}", expiry="1.6y")


def ready() -> Ready:
    return prepare(f"{CONTRACT}---\n{MARKET}")


def names(numbers: tuple[Input, ...]) -> list[str]:
    return [str(number) for number in numbers]


def test_every_number_is_listed_by_name_and_place():
    """Each number once, in a fixed order, with the place where it is written."""
    case = ready()
    found = inputs(case.market, case.dated.contract)
    assert names(found) == [
        "spot of harbour", "vol of harbour at 3m", "vol of harbour at 1y", "vol of harbour at 3y",
        "yield of harbour at 6m", "yield of harbour at 2y", "spot of lantern", "vol of lantern at 1y",
        "vol of lantern at 2y",
        "forward of lantern at 1y", "forward of lantern at 2y", "spot of orchard", "vol of orchard",
        "yield of orchard", "rate of EUR at 6m", "rate of EUR at 2y", "funding of EUR at 1y", "funding of EUR at 3y",
        "correlation of harbour/lantern",
        "correlation of orchard/harbour", "correlation of lantern/orchard"]
    assert len({number.place for number in found}) == len(found)
    line = f"{CONTRACT}---\n{MARKET}".splitlines()[found[1].place.line - 1]
    assert line[found[1].place.column - 1:].startswith("17%")


def test_the_derivative_is_that_of_the_map():
    """Each column is the central difference of the map, whose error is of the order of the step squared."""
    case = ready()
    market, contract, leaves = case.market, case.dated.contract, case.unrolled.tape.leaves
    found = jacobian(market, contract, leaves)
    for column, number in enumerate(inputs(market, contract)):
        step = 1e-5 * (number.value if number.kind in ("spot", "forward") else 1.0)
        up, down = (MarketMap(moved(market, {number: side * step}), contract).values(leaves) for side in (1, -1))
        by_difference = (up - down) / (2 * step)
        np.testing.assert_allclose(found[:, column], by_difference, rtol=1e-6, atol=1e-8, err_msg=str(number))
        assert np.any(found[:, column])


def test_leaves_depend_only_on_what_they_should():
    """A vol moves no discount factor, a spot no factor, a yield only its own asset's drift."""
    case = ready()
    leaves = case.unrolled.tape.leaves
    found = jacobian(case.market, case.dated.contract, leaves)
    numbers = inputs(case.market, case.dated.contract)
    hit = {str(number): {leaves[k].kind.name for k in np.flatnonzero(found[:, column])}
           for column, number in enumerate(numbers)}
    assert hit["spot of lantern"] == {"LOG_SPOT"}, "its forwards go along"
    assert hit["vol of harbour at 1y"] == {"DRIFT", "FACTOR"}
    assert hit["yield of harbour at 2y"] == {"DRIFT"}
    assert hit["funding of EUR at 1y"] == {"DISCOUNT"}
    assert hit["rate of EUR at 2y"] == {"DRIFT", "DISCOUNT"}
    assert hit["correlation of lantern/orchard"] == {"FACTOR"}


def test_a_rate_of_discount_factors_is_moved_by_its_zero_rate():
    """A discount factor of 2y falls by exp(-2 bp) where its zero rate rises by one basis point."""
    case = ready()
    rate = next(number for number in inputs(case.market, case.dated.contract) if str(number) == "rate of EUR at 2y")
    there = moved(case.market, {rate: 1e-4}).rates["EUR"].nodes[1].quoted.value
    assert there == pytest.approx(0.955 * np.exp(-2e-4), rel=1e-14)


def test_kinks_are_named():
    """A vol next to a stretch without variance and correlations of a singular matrix have no derivative."""
    text = f"{CONTRACT}---\n{MARKET}"
    assert without_derivative(ready().market, ready().dated.contract) == {}
    flat = request_of(text.replace("{1y: 31%, 2y: 27%}", "{1y: 28%, 4y: 14%}"))
    kinks = without_derivative(flat.market, flat.contracts[0])
    assert names(tuple(kinks)) == ["vol of lantern at 1y", "vol of lantern at 4y"]
    text = text.replace("harbour/lantern: 40%", "harbour/lantern: 100%")
    tied = request_of(text.replace("lantern/orchard: 10%", "lantern/orchard: -20%"))
    assert len(without_derivative(tied.market, tied.contracts[0])) == 3


def test_the_same_market_where_nothing_moves():
    """Moving by nothing gives the same numbers, and moving leaves the original alone."""
    case = ready()
    number = inputs(case.market, case.dated.contract)[0]
    assert moved(case.market, {}) == case.market
    assert moved(case.market, {number: 1.0}) != case.market
    assert replace(case.market) == ready().market


ABROAD = """contract: c
currency: EUR
notional: 100
assets: [harbour, lantern, quarry]
conversion: {lantern: quanto, quarry: composite}
payoff: rainbow_option
terms: {side: call, which: worst, strike: 100%, initial: {harbour: 100, lantern: 50, quarry: 80}, expiry: 1.6y}
---
market: 0y
rates: {EUR: 2%, USD: 4%, CHF: 1%}
funding: {EUR: 50 bp}
fx: {CHF per EUR: {spot: 0.95, vol: {1y: 6%, 2y: 7%}}}
assets:
  harbour: {spot: 100, currency: EUR, underlying: total return, decrement: 5 points, vol: 20%}
  lantern:
    spot: 52.5
    currency: USD
    dividends: [{ex: 0.5y, cash: 1.2, share: 1%}, {ex: 1y, cash: 0.8}]
    dividend_blend: {cash_until: 0.8y, share_from: 1.1y}
    vol: {1y: 31%, 2y: 29%}
    quanto: {fx_vol: {1y: 8%, 2y: 9%}, fx_correlation: -30%, fx: USD per EUR}
  quarry: {spot: 80, currency: CHF, underlying: total return, decrement: 4%, vol: 24%}
correlation:
  harbour/lantern: 40%
  harbour/quarry: -20%
  lantern/quarry: 10%
  harbour/CHF per EUR: 15%
  lantern/CHF per EUR: -5%
  quarry/CHF per EUR: 25%
"""


def test_dividends_decrements_and_rates_of_exchange():
    """They are listed, and each column is the central difference of the map."""
    case = prepare(ABROAD)
    market, contract, leaves = case.market, case.dated.contract, case.unrolled.tape.leaves
    numbers = inputs(market, contract)
    assert [str(number) for number in numbers if number.kind not in ("spot", "vol", "rate", "funding")] == [
        "decrement points of harbour", "dividend of lantern at 0.5y", "dividend share of lantern at 0.5y",
        "dividend of lantern at 1y", "fx vol of lantern at 1y", "fx vol of lantern at 2y", "fx correlation of lantern",
        "decrement of quarry", "fx spot of CHF per EUR", "fx vol of CHF per EUR at 1y", "fx vol of CHF per EUR at 2y",
        "correlation of harbour/lantern", "correlation of harbour/quarry", "correlation of harbour/CHF per EUR",
        "correlation of lantern/quarry", "correlation of lantern/CHF per EUR", "correlation of quarry/CHF per EUR"]
    assert without_derivative(market, contract) == {}
    found = jacobian(market, contract, leaves)
    for column, number in enumerate(numbers):
        step = 1e-5 * (number.value if number.kind in ("spot", "fx spot", "decrement points", "dividend") else 1.0)
        up, down = (MarketMap(moved(market, {number: side * step}), contract).values(leaves) for side in (1, -1))
        np.testing.assert_allclose(found[:, column], (up - down) / (2 * step), rtol=1e-6, atol=1e-8, err_msg=str(number))
        assert np.any(found[:, column]), number
