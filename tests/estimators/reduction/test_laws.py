"""Exact means of controls: against published values, by simulation, and under curves of rates, yields and vols."""

from __future__ import annotations

import math
from dataclasses import replace

import closed_forms as forms
import numpy as np
import pytest
from helpers import request_of

from mcx.checked.market import Market
from mcx.dates.dated_contract import DatedContract
from mcx.dates.dating import date_contract, date_on
from mcx.estimators.ready import Ready, prepare
from mcx.estimators.reduction.controls import change
from mcx.estimators.reduction.laws import Walk, extreme_call_mean, extreme_put_mean
from mcx.estimators.reduction.scheme import Case, Draft
from mcx.machine.run import run

SEED = 0xA54FF53A5F1D36F1
HEAD = "contract: made\ncurrency: EUR\nunits: 1\nassets: {assets}\npayoff: {payoff}\nterms:\n{terms}\n---\n{market}"
FLAT = """market: 0y
rates: {EUR: 4%}
assets:
  harbour: {spot: 100, currency: EUR, yield: 1.5%, vol: 22%}
  lantern: {spot: 95, currency: EUR, yield: 3%, vol: 30%}
correlation: {harbour/lantern: 40%}
"""
CURVED = """market: 0y
rates: {EUR: {0.3y: 1%, 0.8y: 5%, 2y: 3%}}
assets:
  harbour: {spot: 100, currency: EUR, yield: {0.5y: 0%, 1y: 4%}, vol: {0.4y: 30%, 1y: 20%}}
  lantern: {spot: 95, currency: EUR, yield: 3%, vol: {0.7y: 25%, 1y: 30%}}
correlation: {harbour/lantern: 40%}
"""
DIVIDENDS = """market: 0y
rates: {EUR: 3%}
assets:
  harbour: {spot: 100, currency: EUR, vol: 22%, dividends: [{ex: 0.3y, cash: 3}, {ex: 0.6y, cash: 2, share: 1%}]}
  lantern: {spot: 95, currency: EUR, yield: 3%, vol: 30%}
correlation: {harbour/lantern: 40%}
"""
QUANTO = """market: 0y
rates: {EUR: 3%, USD: {0.5y: 5%, 1y: 4%}}
funding: {EUR: {0.5y: 50 bp, 1y: 110 bp}}
assets:
  harbour: {spot: 100, currency: USD, vol: {0.4y: 30%, 1y: 24%}, dividends: [{ex: 0.3y, cash: 3}],
            quanto: {fx_vol: {0.25y: 6%, 1y: 12%}, fx_correlation: 45%, fx: EUR per USD}}
  lantern: {spot: 95, currency: EUR, yield: 3%, vol: 30%}
correlation: {harbour/lantern: 40%}
"""
COMPOSITE = """market: 0y
rates: {EUR: 3%, USD: {0.5y: 5%, 1y: 4%}}
funding: {EUR: 90 bp}
fx: {EUR per USD: {spot: 0.9, vol: {0.25y: 6%, 1y: 12%}}}
assets:
  harbour: {spot: 111, currency: USD, yield: 1%, vol: {0.4y: 30%, 1y: 24%}}
  lantern: {spot: 95, currency: EUR, yield: 3%, vol: 30%}
correlation: {harbour/lantern: 40%, harbour/EUR per USD: 30%, lantern/EUR per USD: -20%}
"""
CONTRACTS = {
    "average": ("[harbour]", "asian", "  side: call\n  average_type: arithmetic\n  strike_type: fixed\n  strike: 100\n"
                                      "  averaging: {count: 12, until: 1y}\n  expiry: 1y"),
    "average strike": ("[harbour]", "asian", "  side: call\n  average_type: arithmetic\n  strike_type: floating\n"
                                             "  averaging: {count: 12, until: 1y}\n  expiry: 1y"),
    "barrier": ("[harbour]", "barrier", "  side: call\n  direction: down\n  knock: out\n  strike: 100\n  barrier: 90\n"
                                        "  watched: {count: 12, until: 1y}\n  expiry: 1y"),
    "up": ("[harbour]", "barrier", "  side: put\n  direction: up\n  knock: in\n  strike: 105\n  barrier: 115\n"
                                   "  watched: {count: 12, until: 1y}\n  expiry: 1y"),
    "lookback": ("[harbour]", "lookback", "  side: call\n  strike_type: fixed\n  strike: 105\n"
                                          "  watched: {count: 12, until: 1y}\n  expiry: 1y"),
    "lookback strike": ("[harbour]", "lookback", "  side: call\n  strike_type: floating\n"
                                                 "  watched: {count: 12, until: 1y}\n  expiry: 1y"),
    "exchange": ("[harbour, lantern]", "exchange_option", "  receive: harbour\n  give: lantern\n  receive_units: 1\n"
                                                          "  give_units: 1\n  expiry: 1y"),
    "digital": ("[harbour]", "digital", "  side: put\n  pays: cash\n  amount: 1\n  strike: 104\n  expiry: 1y"),
}


SEASONED = """contract: made
currency: EUR
units: 1
assets: [harbour]
start: 2026-12-01
settlement: 2 business days
calendar: {{holidays: none, roll: following}}
{more}payoff: {payoff}
terms:
{terms}
---
market: 2027-05-20
rates: {{EUR: 3%, USD: 4%}}
funding: {{EUR: 90 bp}}
assets:
  harbour: {{spot: 103, currency: EUR, vol: {{3m: 30%, 1y: 24%}}, dividends: [{{ex: 2027-08-02, cash: 3}}]}}
fixings: {{harbour: {{2027-01-01: 99, 2027-02-01: 104.5, 2027-03-01: 97, 2027-04-01: 101, 2027-05-03: 100.5}}}}
"""
SPLIT = "adjustments: {harbour: {2027-03-15: 2}}\n"  # what is to come counts twice, the strikes with it


def seasoned(name: str, split: bool) -> Ready:
    """A contract of dates of which five have passed."""
    assets, payoff, terms = CONTRACTS[name]
    terms = terms.replace("{count: 12, until: 1y}", "{from: 2027-01-01, until: 2027-12-01, every: 1 month}").replace(
        "1y", "2027-12-01")
    text = SEASONED.format(payoff=payoff, terms=terms, more=SPLIT if split else "")
    if split:
        text = text.replace("spot: 103", "spot: 51.5").replace("2027-04-01: 101, 2027-05-03: 100.5",
                                                               "2027-04-01: 50.5, 2027-05-03: 50.25")
    request = request_of(text)
    dated, faults = date_on(request.contracts[0], request.market)
    assert not faults
    return priced(dated, request.market)


def priced(dated: DatedContract, market: Market) -> Ready:
    ready, faults = prepare(dated, market)
    assert not faults
    return ready


def made(name: str, market: str) -> Ready:
    assets, payoff, terms = CONTRACTS[name]
    if market is COMPOSITE:
        payoff = f"{payoff}\nconversion: {{harbour: composite}}"
    request = request_of(HEAD.format(assets=assets, payoff=payoff, terms=terms, market=market))
    dated, faults = date_contract(request.contracts[0], request.market.valuation)
    assert not faults
    return priced(dated, request.market)


@pytest.mark.parametrize("market", [FLAT, CURVED, DIVIDENDS, QUANTO, COMPOSITE],
                         ids=["flat", "curves", "dividends", "quanto", "composite"])
@pytest.mark.parametrize("name", CONTRACTS)
def test_means_are_those_of_a_simulation(name: str, market: str):
    """Every candidate of each contract: |z| < 4.7 for some 1000 of them, few at once wrong in the third digit."""
    hold_the_means(made(name, market))


@pytest.mark.parametrize("split", [False, True], ids=["as fixed", "after a split"])
@pytest.mark.parametrize("name", [name for name in CONTRACTS if name != "exchange"])
def test_means_after_fixings_are_those_of_a_simulation(name: str, split: bool):
    """Fixings, an adjustment, a cash dividend to come and funding change none of it."""
    hold_the_means(seasoned(name, split))


def hold_the_means(ready: Ready) -> None:
    """Every candidate of a contract against its simulation."""
    draft = change(Case(ready, SEED), Draft(ready.unrolled.observed))
    tape = ready.expanded(draft.tape)
    tape = replace(tape, outputs=tape.outputs[-len(draft.controls):])
    sums = run(ready.lowered(tape), seed=SEED, paths=1 << 16)
    assert len(draft.controls) >= 2
    for control, mean, error in zip(draft.controls, sums.mean, sums.standard_error, strict=True):
        assert abs(mean - control.mean) <= 4.7 * error + 1e-12, control.name


@pytest.mark.parametrize(("name", "wanted"), [("average", "call on geometric average"), ("barrier", "call at 100 of"),
                                              ("lookback", "option on the highest"), ("exchange", "exchange of"),
                                              ("average strike", "exchange of"), ("digital", "digital on"),
                                              ("up", "digital at 105 of"), ("lookback strike", "option on the lowest")])
def test_what_is_found(name: str, wanted: str):
    """The control that a reader of the contract would name."""
    ready = made(name, FLAT)
    names = [control.name for control in change(Case(ready, SEED), Draft(ready.unrolled.observed)).controls]
    assert any(each.startswith(wanted) for each in names), names


@pytest.mark.parametrize(("kind", "direction", "strike", "barrier"), [
    ("call", "down", 90.0, 95.0), ("call", "down", 100.0, 95.0), ("call", "up", 90.0, 105.0),
    ("put", "down", 100.0, 95.0), ("put", "up", 100.0, 105.0), ("put", "up", 110.0, 105.0)])
def test_continuous_barriers(kind: str, direction: str, strike: float, barrier: float):
    """The options of E. Haug's table of standard barriers, "The complete guide to option pricing formulas" (2007), by the
    formula of `closed_forms.py`, which `test_closed_forms.py` holds against that table."""
    flat = {"spot": 100.0, "maturity": 0.5, "rate": 0.08, "dividend_yield": 0.04, "vol": 0.25}
    walk = Walk(math.log(100.0), (0.04 - 0.03125) / 0.0625, 0.03125, math.log(barrier), direction == "up")
    sign = 1.0 if kind == "call" else -1.0
    ends = (math.log(strike), math.inf) if kind == "call" else (-math.inf, math.log(strike))
    found = math.exp(-0.04) * walk.untouched(sign, -sign * strike, *ends)
    assert found == pytest.approx(forms.barrier_option(kind, direction, "out", strike, barrier, **flat), rel=1e-12)


@pytest.mark.parametrize("drift", [0.3, -0.7, -0.5, 1e-9])
def test_continuous_extremes(drift: float):
    """Against the closed form for lookbacks, at a carry that is not zero, and both sides of it where it nearly is."""
    vol, maturity = 0.2, 0.75
    carry = (drift + 0.5) * vol**2
    flat = {"spot": 100.0, "maturity": maturity, "rate": 0.0, "vol": vol}
    for strike in (90.0, 100.0, 111.0):
        start, variance = math.log(100.0), vol**2 * maturity
        shifts = [0.0] if abs(carry) > 1e-6 else [1e-4, -1e-4]
        high, low = (np.mean([forms.lookback_fixed(side, strike=strike, dividend_yield=-carry - shift, **flat)
                              for shift in shifts]) for side in ("call", "put"))
        assert extreme_call_mean(start, drift, variance, strike) == pytest.approx(high, rel=1e-6)
        assert extreme_put_mean(start, drift, variance, strike) == pytest.approx(low, rel=1e-6)
