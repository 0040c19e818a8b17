"""Sensitivities to the nodes of curves, to forwards and discount factors, and of assets that are read on other
dates."""

from __future__ import annotations

from math import exp, log, sqrt

import closed_forms as forms
import pytest

from greek_tools import greeks, slope
from helpers import check, document

PATHS, SEED = 1 << 18, 0xA81A664BBC423001
CALL = document("european", side="call", strike=100, expiry="1.5y")


def value(spot: float, forward: float, discount: float, vol: float) -> float:
    """A call of 1.5 years from its forward, its discount factor and its vol."""
    rate, growth = -log(discount) / 1.5, log(forward / spot) / 1.5
    return forms.european("call", spot, 100.0, 1.5, rate, rate - growth, vol)


def test_vega_and_rho_by_node():
    """Total variance is linear between 1y and 2y, the log of the discount factor too: each node has its share."""
    market = """---
market: 0y
rates: {EUR: {discount_factors: {1y: 0.97, 2y: 0.93}}}
assets:
  harbour: {spot: 100, currency: EUR, yield: 1%, vol: {1y: 20%, 2y: 24%}}
"""

    def by_node(v1: float, v2: float, z1: float, z2: float) -> float:
        """By the vols and by moves of the zero rates at the nodes."""
        vol = sqrt((0.5 * v1**2 + 0.5 * v2**2 * 2.0) / 1.5)
        log_discount = 0.5 * (log(0.97) - z1) + 0.5 * (log(0.93) - 2.0 * z2)
        return value(100.0, 100.0 * exp(-log_discount - 0.015), exp(log_discount), vol)

    at = {"v1": 0.20, "v2": 0.24, "z1": 0.0, "z2": 0.0}
    for estimator in ("pathwise", "likelihood"):
        found = greeks(CALL + market, PATHS, SEED, estimator=estimator)
        check(found["vega", "harbour", "1y"], 0.01 * slope(by_node, at, "v1"), 0.03)
        check(found["vega", "harbour", "2y"], 0.01 * slope(by_node, at, "v2"), 0.03)
        check(found["rho", "EUR", "1y"], 1e-4 * slope(by_node, at, "z1", step=0.1), 0.03)
        check(found["rho", "EUR", "2y"], 1e-4 * slope(by_node, at, "z2", step=0.1), 0.03)


@pytest.mark.parametrize("estimator", ["pathwise", "likelihood"])
def test_forwards_go_with_the_spot(estimator: str):
    """An asset with forwards has the delta of one with a yield; by each forward the log interpolation's share."""
    market = """---
market: 0y
rates: {EUR: 4%}
assets:
  harbour: {spot: 100, currency: EUR, forwards: {1y: 102, 2y: 103}, vol: 22%}
"""
    forward = exp(0.5 * log(102.0) + 0.5 * log(103.0))
    at = {"spot": 100.0, "f1": 102.0, "f2": 103.0}

    def by_forward(spot: float, f1: float, f2: float) -> float:
        return value(spot, exp(0.5 * log(f1) + 0.5 * log(f2)), exp(-0.06), 0.22)

    found = greeks(CALL + market, PATHS, SEED, estimator=estimator)
    delta = slope(lambda spot: value(spot, forward * spot / 100.0, exp(-0.06), 0.22), {"spot": 100.0}, "spot")
    check(found["delta", "harbour", ""], delta, 0.02)
    check(found["forward", "harbour", "1y"], slope(by_forward, at, "f1"), 0.02)
    check(found["forward", "harbour", "2y"], slope(by_forward, at, "f2"), 0.02)


THREE = """payoff: each_on_its_date
about: Cash where the second asset is high at the half year, and where the first and third are high at the end.
assets: 3
pays: money per unit
terms:
  one:    {{type: asset}}
  two:    {{type: asset}}
  three:  {{type: asset}}
  middle: {{type: date}}
  expiry: {{type: date}}
events:
  - at: middle
    if: of(spot, two) > 95
    then:
      - pay: 10
  - at: expiry
    if: of(spot, one) > 100 and of(spot, three) > 90
    then:
      - pay: 10
---
{contract}---
market: 0y
rates: {{EUR: 4%}}
assets:
  harbour: {{spot: 100, currency: EUR, yield: 1.5%, vol: 22%}}
  lantern: {{spot: 95, currency: EUR, yield: 3%, vol: 30%}}
  orchard: {{spot: 90, currency: EUR, yield: 0%, vol: 28%}}
correlation: {{harbour/lantern: 40%, harbour/orchard: 20%, lantern/orchard: -30%}}
"""


def test_an_asset_that_is_read_no_longer():
    """After the half year the second asset's log is noise that nothing reads; the scores of the others are given it."""
    assets = {"one": "harbour", "two": "lantern", "three": "orchard"}
    contract = document("each_on_its_date", "[harbour, lantern, orchard]", **assets,
                        middle="0.5y", expiry="1y")
    found = greeks(THREE.format(contract=contract), 1 << 19, SEED)
    at = {"s1": 100.0, "s2": 95.0, "s3": 90.0, "v1": 0.22, "v2": 0.30, "v3": 0.28, "rho": 0.2}

    def together(s1: float, s2: float, s3: float, v1: float, v2: float, v3: float, rho: float) -> float:
        pair = forms.two_asset_digital(10.0, s1, s3, 100.0, 90.0, 0.015, 0.0, v1, v3, rho, 1.0, 0.04)
        half = {"spot": s2, "maturity": 0.5, "rate": 0.04, "dividend_yield": 0.03, "vol": v2}
        return forms.cash_or_nothing("call", 95.0, 10.0, **half) + pair

    for number, asset in enumerate(("harbour", "lantern", "orchard"), start=1):
        check(found["delta", asset, ""], slope(together, at, f"s{number}"), 0.03)
        check(found["vega", asset, ""], 0.01 * slope(together, at, f"v{number}"), 0.08)
    check(found["correlation", "harbour/orchard", ""], 0.01 * slope(together, at, "rho"), 0.1)
    for pair in ("harbour/lantern", "lantern/orchard"):
        estimate = found["correlation", pair, ""]
        assert abs(estimate.mean) < 4 * estimate.error + 1e-12, "the price does not depend on it"
