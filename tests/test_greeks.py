"""Sensitivities against closed forms, by every estimator that is valid for the payoff."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cache

import closed_forms as forms
import pytest

from greek_tools import Key, bend, greeks, slope
from helpers import Estimate, check

PATHS, SEED = 1 << 18, 0x1F83D9ABFB41BD6B
AT = {"spot": 100.0, "maturity": 1.0, "rate": 0.04, "dividend_yield": 0.015, "vol": 0.22}
MARKET = """market: 0y
rates: {EUR: 4%}
assets:
  harbour: {spot: 100, currency: EUR, yield: 1.5%, vol: 22%}
"""
MONTHS = [k / 12 for k in range(1, 13)]


@dataclass(frozen=True)
class Known:
    """A payoff with a closed form: its terms as written, the form, and which estimators are valid."""

    payoff: str
    terms: str
    value: Callable[..., float]
    estimators: tuple[str, ...] = ("auto", "likelihood", "pathwise")
    gamma: tuple[str, ...] = ("auto", "likelihood", "pathwise")

    @property
    def text(self) -> str:
        terms = "".join(f"  {line.strip()}\n" for line in self.terms.split(";"))
        return (f"contract: known value\ncurrency: EUR\nunits: 1\nassets: [harbour]\npayoff: {self.payoff}\n"
                f"terms:\n{terms}  expiry: 1y\n---\n{MARKET}")


JUMPING = ("auto", "likelihood")
KNOWN = {
    "european put": Known("european", "side: put; strike: 90", lambda **at: forms.european("put", strike=90.0, **at)),
    "digital": Known("digital", "side: call; pays: cash; amount: 10; strike: 120",
                     lambda **at: forms.cash_or_nothing("call", 120.0, 10.0, **at), JUMPING, JUMPING),
    "geometric average": Known(
        "asian", "side: call; average_type: geometric; strike_type: fixed; strike: 100; "
                 "averaging: {count: 12, until: 1y}",
        lambda **at: forms.asian_geometric(
            "call", strike=100.0, times=[t - 1.0 + at["maturity"] for t in MONTHS], **at)),
    "barrier": Known(
        "barrier", "side: put; direction: down; knock: in; strike: 100; barrier: 85; watched: {continuous: [0y, 1y]}",
        lambda **at: forms.barrier_option("put", "down", "in", 100.0, 85.0, **at), JUMPING, JUMPING),
    "no touch": Known(
        "touch", "kind: no touch; direction: up; barrier: 125; cash: 10; watched: {continuous: [0y, 1y]}",
        lambda **at: forms.touch_at_expiry("up", "out", "cash", 125.0, 10.0, **at), JUMPING, JUMPING),
    "lookback call": Known(
        "lookback", "side: call; strike_type: fixed; strike: 105; watched: {continuous: [0y, 1y]}",
        lambda **at: forms.lookback_fixed("call", strike=105.0, **at), gamma=("auto", "pathwise")),
    "lookback put": Known(
        "lookback", "side: put; strike_type: fixed; strike: 95; watched: {continuous: [0y, 1y]}",
        lambda **at: forms.lookback_fixed("put", strike=95.0, **at), gamma=("auto", "pathwise")),
}
CASES = [(name, estimator) for name, known in KNOWN.items() for estimator in known.estimators]
SHARP = 0.03  # errors of at most this share of the value: likelihood ratios of a vega are the widest


@cache
def run(name: str, estimator: str) -> dict[Key, Estimate]:
    return greeks(KNOWN[name].text, PATHS, SEED, estimator=estimator)


@pytest.mark.parametrize(("name", "estimator"), CASES)
def test_first_order(name: str, estimator: str):
    """Delta per 1 of spot, vega per point, rho and yield per basis point."""
    found, value = run(name, estimator), KNOWN[name].value
    check(found["delta", "harbour", ""], slope(value, AT, "spot"), SHARP)
    check(found["vega", "harbour", ""], 0.01 * slope(value, AT, "vol"), SHARP)
    check(found["rho", "EUR", ""], 1e-4 * slope(value, AT, "rate"), SHARP)
    check(found["yield", "harbour", ""], 1e-4 * slope(value, AT, "dividend_yield"), SHARP)


@pytest.mark.parametrize(("name", "estimator"), [(name, each) for name, known in KNOWN.items() for each in known.gamma])
def test_gamma(name: str, estimator: str):
    """The change of delta for a move of the spot by 1 %."""
    check(run(name, estimator)["gamma", "harbour", ""], 0.01 * AT["spot"] * bend(KNOWN[name].value, AT, "spot"), 0.05)


@pytest.mark.parametrize("name", KNOWN)
def test_theta(name: str):
    """The value one calendar day on less the value now."""
    value = KNOWN[name].value
    check(run(name, "auto")["theta", "", "1 day"], value(**AT | {"maturity": 1 - 1 / 365}) - value(**AT), 0.15)


def exchange(**at: float) -> float:
    return forms.exchange(at["s1"], at["s2"], at["q1"], at["q2"], at["v1"], at["v2"], at["rho"], 1.0)


PAIR = {"s1": 100.0, "s2": 95.0, "q1": 0.015, "q2": 0.03, "v1": 0.22, "v2": 0.30, "rho": 0.4}
EXCHANGE = """contract: exchange
currency: EUR
units: 1
assets: [harbour, lantern]
payoff: exchange_option
terms: {receive: harbour, give: lantern, receive_units: 1, give_units: 1, expiry: 1y}
---
market: 0y
rates: {EUR: 4%}
assets:
  harbour: {spot: 100, currency: EUR, yield: 1.5%, vol: 22%}
  lantern: {spot: 95, currency: EUR, yield: 3%, vol: 30%}
correlation: {lantern/harbour: 40%}
"""


@pytest.mark.parametrize("estimator", ["pathwise", "likelihood"])
def test_two_assets(estimator: str):
    """Deltas, vegas, correlation, gammas and the cross gamma of the option to exchange one asset for another."""
    found = greeks(EXCHANGE, 1 << 19, SEED, estimator=estimator)
    for key, by, factor in (("delta", "s", 1.0), ("vega", "v", 0.01), ("yield", "q", 1e-4)):
        for asset, number in (("harbour", "1"), ("lantern", "2")):
            check(found[key, asset, ""], factor * slope(exchange, PAIR, by + number), SHARP)
    check(found["correlation", "lantern/harbour", ""], 0.01 * slope(exchange, PAIR, "rho"), 0.05)
    check(found["gamma", "harbour", ""], bend(exchange, PAIR, "s1"), 0.05)
    check(found["gamma", "lantern", ""], 0.95 * bend(exchange, PAIR, "s2"), 0.05)

    def delta(**at: float) -> float:
        return slope(exchange, at, "s1", step=1e-2)

    check(found["cross gamma", "harbour/lantern", ""], 0.95 * slope(delta, PAIR, "s2", step=1e-2), 0.05)
    rho = found["rho", "EUR", ""]  # the rate drops out
    assert abs(rho.mean) < 4 * max(rho.error, 1e-12)
