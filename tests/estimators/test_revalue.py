"""Revaluation on the same random numbers: bumps, second differences, one day on."""

from __future__ import annotations

from math import sqrt

import closed_forms as forms
import numpy as np
import pytest

from greek_tools import by_name, found, ready
from helpers import Estimate, check, document
from mcx.estimators.batches import Sampling
from mcx.estimators.revalue import Revaluer, central_differences, impossible, second_differences, seen_from, step_of
from mcx.estimators.theta import DAY, between
from mcx.leaves.jacobian import inputs
from mcx.tape.program import Leaf, LeafKind

MARKET = """---
market: 0y
rates: {EUR: 4%}
assets:
  harbour: {spot: 100, currency: EUR, yield: 1.5%, vol: {6m: 22%, 1y: 25%}}
  lantern: {spot: 95, currency: EUR, yield: 3%, vol: 30%}
correlation: {harbour/lantern: 40%}
"""
EXCHANGE = document("exchange_option", "[harbour, lantern]", receive="harbour", give="lantern", receive_units=1,
                    give_units=1, expiry="1y")
SAMPLING = Sampling(0x76F988DA831153B5, 1 << 17)
DATED = """contract: Call that is fixed tomorrow
currency: EUR
units: 1
assets: [harbour]
start: 2026-12-01
settlement: 0 business days
calendar: {{holidays: none, roll: following}}
payoff: european
terms: {{side: call, strike: 90, expiry: {expiry}}}
---
market: 2026-12-01
rates: {{EUR: 4%}}
funding: {{EUR: 0 bp}}
assets:
  harbour: {{spot: 100, currency: EUR, yield: 1.5%, vol: 22%}}
"""


def test_differences_of_a_closed_form():
    """A bump finds the difference quotient of the closed form, bias and all; the cross difference likewise."""
    made, market = ready(EXCHANGE + MARKET)
    contract = made.dated.contract
    numbers = inputs(market, contract)
    spots = [number for number in numbers if number.kind == "spot"]
    revaluer = Revaluer.of(made.unrolled.tape, contract)
    size = 0.05

    def value(one: float, other: float) -> float:
        return forms.exchange(one, other, 0.015, 0.03, 0.25, 0.30, 0.40, 1.0)

    first = central_differences(revaluer, market, {spot: step_of(spot, size) for spot in spots}, SAMPLING).estimates()
    check(Estimate(first[0].value, first[0].standard_error), (value(105, 95) - value(95, 95)) / 10, 0.02)
    check(Estimate(first[1].value, first[1].standard_error), (value(100, 99.75) - value(100, 90.25)) / 9.5, 0.02)
    base, _ = revaluer.price(market, SAMPLING)
    pairs = [(spots[0], spots[0]), (spots[0], spots[1])]
    second = second_differences(revaluer, market, pairs, size, SAMPLING, base).estimates()
    check(Estimate(second[0].value, second[0].standard_error),
          (value(105, 95) - 2 * value(100, 95) + value(95, 95)) / 25, 0.05)
    cross = (value(105, 99.75) - value(105, 90.25) - value(95, 99.75) + value(95, 90.25)) / (4 * 5 * 4.75)
    check(Estimate(second[1].value, second[1].standard_error), cross, 0.05)


def test_a_difference_has_a_smaller_error_than_its_ends():
    """Common random numbers: what both ends share drops out."""
    made, market = ready(EXCHANGE + MARKET)
    revaluer = Revaluer.of(made.unrolled.tape, made.dated.contract)
    spot = inputs(market, made.dated.contract)[0]
    difference = central_differences(revaluer, market, {spot: 1.0}, SAMPLING).estimates()[0]
    price = revaluer.price(market, SAMPLING)[1]
    assert 2.0 * difference.standard_error < 0.1 * sqrt(2) * price.standard_error


def test_markets_that_cannot_be():
    """Each reason by itself; '' for a market that can be."""
    made, market = ready(EXCHANGE + MARKET)
    contract = made.dated.contract
    number = {str(each): each for each in inputs(market, contract)}
    for moves, reason in (
        ({"spot of harbour": -100.0}, "the level of harbour would not be above 0"),
        ({"vol of lantern": -0.3}, "a vol of lantern would not be above 0"),
        ({"vol of harbour at 6m": 0.15}, "the total variance of harbour would fall"),
        ({"correlation of harbour/lantern": 0.7}, "the correlations would not belong to any joint law"),
        ({"correlation of harbour/lantern": 0.5, "spot of harbour": 7.0}, ""),
    ):
        assert impossible(market, contract, {number[name]: move for name, move in moves.items()}).startswith(reason)
        assert bool(reason) == bool(impossible(market, contract, {number[name]: move for name, move in moves.items()}))


def test_sizes_of_moves():
    """Spots by a share, vols and correlations by the size, rates by a tenth of it."""
    made, market = ready(EXCHANGE + MARKET)
    steps = {str(number): step_of(number, 0.01) for number in inputs(market, made.dated.contract)}
    assert steps["spot of lantern"] == pytest.approx(0.95) and steps["vol of lantern"] == 0.01
    assert steps["correlation of harbour/lantern"] == 0.01
    assert steps["rate of EUR"] == steps["yield of harbour"] == 0.001


def test_seen_from_a_later_day():
    """Times are nearer, those in between are now; terms stay."""
    drift, term = Leaf(LeafKind.DRIFT, 0, start=0.5, end=1.0), Leaf(LeafKind.TERM, name="strike")
    early = Leaf(LeafKind.DISCOUNT, end=0.001)
    later = seen_from([drift, term, early], 0.25)
    assert (later[0].start, later[0].end) == (0.25, 0.75) and later[1] == term and later[2].end == 0.0


def test_a_fixing_in_between_is_taken_today_and_named():
    """A call that is fixed and paid tomorrow is then worth what it pays at today's level, for certain."""
    run = found(DATED.format(expiry="2026-12-02"), 1 << 12, 1)
    theta = by_name(run.values)["theta", "", "1 day"]
    assert run.price.value + theta.mean == pytest.approx(10.0, rel=1e-12)
    assert [note for note in run.notes if note.startswith("theta: ")] == [
        "theta: a payment's date on 2026-12-02 lies in between and is taken at today's levels",
        "theta: the payment 'payment' on 2026-12-02 lies in between and is counted in"]


def test_nothing_in_between_is_not_named():
    """The day after tomorrow is not in between."""
    made, _ = ready(DATED.format(expiry="2026-12-03"))
    assert list(between(made.dated, made.unrolled.state)) == []


def test_theta_of_a_watch_splits_where_curves_bend_on_either_day():
    """A continuous barrier under a bending vol: the value a day on is that of a contract a day shorter on the same
    document."""
    terms = {"side": "put", "direction": "down", "knock": "in", "strike": 100, "barrier": 85}
    market = MARKET.split("  lantern")[0]
    long, short = (document("barrier", **terms, watched=f"{{continuous: [0y, {end!r}y]}}", expiry=f"{end!r}y") + market
                   for end in (1.0, 1.0 - DAY))
    theta = by_name(found(long, 1 << 17, 3).values)["theta", "", "1 day"]
    prices = [found(text, 1 << 20, seed).price for text, seed in ((long, 4), (short, 5))]
    gap = prices[1].value - prices[0].value
    error = np.hypot(theta.error, np.hypot(*(price.standard_error for price in prices)))
    assert abs(theta.mean - gap) < 4 * error
    assert theta.error < 0.2 * abs(theta.mean)
