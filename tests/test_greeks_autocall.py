"""An autocall on one asset: price and sensitivities against backward recursion by Gauss-Legendre quadrature."""

from __future__ import annotations

from functools import cache
from math import exp, log, sqrt

import numpy as np
import pytest

from greek_tools import bend, by_name, found, slope
from helpers import Estimate, check

TIMES = [0.5 * k for k in range(1, 7)]
CALL = [1.0, 1.0, 0.975, 0.95, 0.925, 0.9]
COUPON, COUPON_BARRIER, KNOCK_IN = 0.039, 0.8, 0.65
AT = {"spot": 97.0, "vol": 0.19, "rate": 0.022, "dividend_yield": 0.024, "funding": 0.008}
NODES, WEIGHTS = np.polynomial.legendre.leggauss(32)
TEXT = f"""contract: step-down autocall
currency: EUR
notional: 1000000
assets: [harbour]
payoff: autocall
terms:
  initial: 100
  observations: {{count: 6, until: 3y}}
  first_call: 0.5y
  call_barrier: [{", ".join(f"{100 * level}%" for level in CALL)}]
  coupon_barrier: {COUPON_BARRIER:.0%}
  coupon: {100 * COUPON}%
  memory: false
  knock_in: {KNOCK_IN:.0%}
  watched: observations.last
  strike: 100%
---
market: 0y
rates: {{EUR: 2.2%}}
funding: {{EUR: 80 bp}}
assets:
  harbour: {{spot: 97, currency: EUR, yield: 2.4%, vol: 19%}}
"""


def autocall(spot: float, vol: float, rate: float, dividend_yield: float, funding: float, gone: float = 0.0) -> float:
    """The price in parts of the notional. Between dates the log of the level is normal; on each date the value is
    smooth between the levels at which something turns, and is integrated piece by piece. `gone`: years since the
    start."""
    drift = rate - dividend_yield - vol**2 / 2
    reach = 10 * vol * sqrt(TIMES[-1]) + abs(drift) * TIMES[-1]
    nodes = values = None
    for number in range(len(TIMES) - 1, -1, -1):
        step = TIMES[0] - (gone if number == 0 else 0.0)
        levels = sorted({CALL[number], COUPON_BARRIER, *([KNOCK_IN, 1.0] if number == len(TIMES) - 1 else [])})
        ends = [-reach, *(log(level) for level in levels), reach]
        cuts = [x for a, b in zip(ends, ends[1:], strict=False)
                for x in np.linspace(a, b, 2 + int((b - a) / (2.0 * vol)))[:-1]]
        cuts.append(reach)
        halves = np.diff(cuts)[:, None] / 2
        here = (np.array(cuts)[:-1, None] + halves * (NODES + 1)).ravel()
        weight = (halves * WEIGHTS).ravel()
        performance = np.exp(here)
        value = np.where(performance >= COUPON_BARRIER, COUPON, 0.0) + 1.0
        if number == len(TIMES) - 1:
            value += np.where(performance < KNOCK_IN, np.minimum(performance - 1.0, 0.0), 0.0)
        else:
            held = later(here, nodes, values, drift * TIMES[0], vol * sqrt(TIMES[0]))
            value = np.where(performance >= CALL[number], value, value - 1.0 + held)
        values = weight * value * exp(-(rate + funding) * step)
        nodes = here
    x = np.array([log(spot / 100.0)])
    return float(later(x, nodes, values, drift * step, vol * sqrt(step))[0])


def later(x: np.ndarray, nodes: np.ndarray, values: np.ndarray, drift: float, deviation: float) -> np.ndarray:
    """From each x the expectation of what is worth `values` (times their quadrature weights) at the nodes, a step
    later."""
    z = (nodes - x[:, None] - drift) / deviation
    return np.exp(-0.5 * z**2) @ values / (deviation * sqrt(2 * np.pi))


@cache
def run() -> dict:
    result = found(TEXT, 1 << 19, 0x510E527FADE682D1)
    return by_name(result.values) | {"price": Estimate(result.price.value, result.price.standard_error)}


def test_price():
    """The recursion and the machine price the same contract."""
    check(run()["price"], autocall(**AT), 1e-3)


@pytest.mark.parametrize(("key", "by", "unit"), [
    (("delta", "harbour", ""), "spot", 1.0), (("vega", "harbour", ""), "vol", 0.01), (("rho", "EUR", ""), "rate", 1e-4),
    (("yield", "harbour", ""), "dividend_yield", 1e-4), (("funding", "EUR", ""), "funding", 1e-4)])
def test_first_order(key: tuple, by: str, unit: float):
    """The likelihood ratio against sixth-order differences of the recursion; a pathwise delta would be a fifth of
    it."""
    check(run()[key], 1e6 * unit * slope(autocall, AT, by, step=4e-3), 0.02)


def test_gamma():
    """The second-order score."""
    check(run()["gamma", "harbour", ""], 1e6 * 0.01 * AT["spot"] * bend(autocall, AT, "spot", step=4e-3), 0.05)


def test_theta():
    """One calendar day on, every date is a day nearer."""
    check(run()["theta", "", "1 day"], 1e6 * (autocall(**AT, gone=1 / 365) - autocall(**AT)), 0.2)
