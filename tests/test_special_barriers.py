"""Barriers at the spot, beyond it and at the strike, for every kind of watch (those that cross each other are in
`test_watching.py`); and the intervals of a price that lies between bounds."""

from __future__ import annotations

from math import exp, sqrt

import numpy as np
import pytest
from closed_forms import barrier_option, european, hit_by
from helpers import Ready, check, document, price_of, request_of
from test_watching import ALWAYS, COUNTED, FLAT, MARKET, TWO

from mcx.dates.dating import date_contract
from mcx.leaves.market_map import MarketMap
from mcx.tape.registers import lower
from mcx.tape.unroll import unroll

SEED = 0xD807AA98A3030242
DISCOUNT = exp(-0.04)


def barrier(side: str, direction: str, knock: str, strike: float, level: float) -> str:
    return document("barrier", side=side, direction=direction, knock=knock, strike=strike, barrier=level,
                    watched=ALWAYS, expiry="1y") + MARKET


@pytest.mark.parametrize("side", ["call", "put"])
@pytest.mark.parametrize(("direction", "level"), [("down", 100.0), ("down", 110.0), ("up", 100.0), ("up", 90.0)])
def test_barriers_at_the_spot_or_beyond_it(side: str, direction: str, level: float):
    """At the spot, and where the spot is beyond it, a barrier is reached at once: out is worth nothing on any path, in
    is the option itself."""
    out = price_of(barrier(side, direction, "out", 105.0, level), 4096, SEED)
    assert out.mean == out.error == 0.0
    check(price_of(barrier(side, direction, "in", 105.0, level), 2**18, SEED), european(side, strike=105.0, **FLAT),
          sharp=1e-2)


@pytest.mark.parametrize(("side", "direction", "level"), [("call", "down", 92.0), ("put", "down", 92.0),
                                                         ("call", "up", 109.0), ("put", "up", 109.0)])
@pytest.mark.parametrize("knock", ["in", "out"])
def test_barriers_at_the_strike(side: str, direction: str, knock: str, level: float):
    """The closed form where it is not nothing; a call that is knocked out before it can pay, and a put, are nothing."""
    found = price_of(barrier(side, direction, knock, level, level), 2**18, SEED)
    if knock == "out" and (side, direction) in (("call", "up"), ("put", "down")):
        assert found.mean == found.error == 0.0
    else:
        check(found, barrier_option(side, direction, knock, level, level, **FLAT), sharp=2e-2)


def test_a_barrier_of_the_worst_at_the_spot():
    """Of several assets one at its barrier is enough, on every path, whatever the bounds of the others."""
    text = COUNTED.replace("lower:   {type: level}", "lower:   {type: level, per: assets}")
    text += document("counted", assets="[harbour, lantern]", lower="{harbour: 60, lantern: 100}", upper=1e9,
                     watched=ALWAYS, dates="{count: 4, until: 1y}", expiry="1y")
    found = price_of(text + TWO.replace("RHO", "30%"), 4096, SEED)
    assert found.mean == found.error == 0.0


@pytest.mark.parametrize(("direction", "level"), [("down", 100.0), ("down", 120.0), ("up", 100.0), ("up", 80.0)])
def test_hits_at_once(direction: str, level: float):
    """An amount paid at the hit is paid today, undiscounted, where the spot is at the barrier or beyond."""
    text = document("touch_at_hit", direction=direction, barrier=level, cash=7, watched=ALWAYS)
    found = price_of(text + MARKET, 4096, SEED)
    assert found.mean == 7.0 and found.error == 0.0


def test_intervals_of_a_price_between_bounds_cover():
    """A worst-of no-touch of two independent assets, refined until its bounds are far closer than its error: over 400
    seeds the 95 % intervals around the middle cover the product of two closed forms about 95 % of the time."""
    text = COUNTED + document("counted", assets="[harbour, lantern]", lower=85, upper=1e9, watched=ALWAYS, dates="1y",
                              expiry="1y") + TWO.replace("RHO", "0%")
    request = request_of(text)
    dated, _ = date_contract(request.contracts[0], None)
    market = MarketMap.of(request.market, dated)
    unrolled = unroll(dated, nodes=market.nodes(), makeup=market.makeup(), pieces=64)
    ready = Ready(dated, request.market, unrolled, lower(unrolled.tape, market.values(unrolled.tape.leaves)))
    truth = DISCOUNT * (1.0 - hit_by("down", 85.0, **FLAT)) ** 2
    seeds = np.random.default_rng(SEED).integers(1, 2**63, 400)
    estimates = [ready.price(1024, int(seed)) for seed in seeds]
    z = np.array([(estimate.mean - truth) / estimate.error for estimate in estimates])
    assert 0.92 <= np.mean(np.abs(z) < 1.96) <= 0.98
    gap = ready.estimates(2**14, SEED)["gap: price"].mean
    pooled, error = np.mean([each.mean for each in estimates]), sqrt(sum(each.error**2 for each in estimates)) / 400
    assert abs(pooled - truth) < gap / 2 + 4 * error and 0.0 < gap < 0.2 * estimates[0].error
