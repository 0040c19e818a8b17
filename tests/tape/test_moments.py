"""The moment of a hit that is kept by `set`: alone it has its law, beside what may happen at that time it has none."""

from __future__ import annotations

from math import exp, sqrt

import numpy as np
import pytest
from closed_forms import hit_by
from helpers import document, prepare, request_of
from test_watching import FLAT, MARKET, TWO

from mcx.dates.dating import date_contract
from mcx.tape.unroll import unroll

SEED = 0x5807AA98A3030242
KEPT = """payoff: kept
about: The moments of two hits, kept until the end.
terms:
  early:  {type: watch}
  late:   {type: watch}
  expiry: {type: date}
running:
  up:    {ever: "of(spot > 112, harbour)", at: early}
  down:  {ever: "of(spot < 90, OTHER)", at: late}
  least: {lowest: "of(spot, harbour)", at: late}
  first: {start: 1}
  other: {start: 1}
events:
  - at: {once: up}
    set: {first: years}
  - at: {once: down}
    set: {other: years}
  - at: expiry
    pay: WHAT
---
"""
ALL = "{continuous: [0y, 1y]}"


def kept(what: str, asset: str = "harbour", early: str = ALL, late: str = ALL) -> str:
    assets, market = ("[harbour]", MARKET) if asset == "harbour" else ("[harbour, lantern]", TWO.replace("RHO", "0%"))
    return (KEPT.replace("OTHER", asset).replace("WHAT", what)
            + document("kept", assets=assets, early=early, late=late, expiry="1y") + market)


@pytest.mark.parametrize(("what", "asset"), [
    ("first * other", "harbour"), ("max(first, other)", "harbour"), ("1 if first < other else 0", "harbour"),
    ("first * other", "lantern"), ("first if down else 0", "harbour"), ("first if down else 0", "lantern"),
    ("1 if up and first < other else 0", "harbour"), ("first * (1 + other)", "harbour"), ("least * first", "harbour"),
    ("1 / (first + other)", "harbour"), ("max(first + (1 if down else 0), 1)", "harbour"),
])
def test_what_has_no_joint_law_is_refused(what: str, asset: str):
    """Two moments, and a moment beside another flag or an extreme of the same time, of whichever asset; the fault
    stands at the event of the hit."""
    dated, _ = date_contract(request_of(kept(what, asset)).contracts[0], None)
    faults = unroll(dated, nodes=()).faults
    assert faults and all("how they go together is not known" in fault.text for fault in faults)
    assert {fault.place.line for fault in faults} <= {14, 16} and faults[0].place.line == 14


@pytest.mark.parametrize("what", [
    "first", "first if up else 0", "first ** 2", "exp(-first) * of(spot, harbour)", "first + other",
    "2 * first - other * of(spot, harbour) + (3 if down else 0)", "(1 if up and not down else 0) + min(first, 0.5)",
    "first if of(spot, harbour) > 100 else other",
])
def test_what_is_a_sum_of_moments_alone_is_not(what: str):
    dated, _ = date_contract(request_of(kept(what)).contracts[0], None)
    assert not unroll(dated, nodes=()).faults


def test_a_moment_is_refused_where_steps_may_be_cut():
    """Levels of two assets watched together have a chance between bounds, for which steps are cut; a moment is a part
    of one of them. Apart in time it keeps its step."""
    what = "first + (1 if up and down else 0)"
    dated, _ = date_contract(request_of(kept(what, "lantern")).contracts[0], None)
    (fault,) = unroll(dated, nodes=()).faults
    assert fault.place.line == 14 and "in finer and finer steps" in fault.text
    early, late = "{continuous: [0y, 0.5y]}", "{continuous: [0.5y, 1y]}"
    assert prepare(kept(what, "lantern", early, late)).price(1 << 10, SEED).error > 0.0


def test_moments_of_hits_apart_in_time_share_their_draws():
    """One normal and one uniform serve every moment, so two of them have no product even where they cannot meet."""
    text = kept("first * other", early="{continuous: [0y, 0.5y]}", late="{continuous: [0.5y, 1y]}")
    dated, _ = date_contract(request_of(text).contracts[0], None)
    assert {fault.place.line for fault in unroll(dated, nodes=()).faults} == {14, 16}


def test_a_moment_and_a_flag_of_another_time():
    """Watched one after the other, up and then down: the price is that of a fine grid with barriers moved by the
    overshoot of a step (Broadie, Glasserman & Kou 1997); alone the moment has the mean of its closed form."""
    times = {"early": "{continuous: [0y, 0.5y]}", "late": "{continuous: [0.5y, 1y]}"}
    found = prepare(kept("first if down else 0", **times)).price(2**15, SEED)
    rng, steps, paths = np.random.default_rng(SEED), 1 << 9, 1 << 14
    dt, vol = 1.0 / steps, 0.22
    log, hit = np.zeros(paths), np.zeros((2, paths), dtype=bool)
    first, beyond = np.ones(paths), 0.5826 * vol * sqrt(dt)
    for step in range(steps):
        log += (0.04 - 0.015 - 0.5 * vol**2) * dt + vol * sqrt(dt) * rng.standard_normal(paths)
        late = int(step >= steps // 2)
        now = ~hit[late] & (log < np.log(0.90) + beyond if late else log > np.log(1.12) - beyond)
        first = np.where(now & (late == 0), (step + 0.5) * dt, first)
        hit[late] |= now
    values = exp(-0.04) * first * hit[1]
    assert abs(found.mean - values.mean()) < 4 * np.hypot(found.error, values.std() / sqrt(paths)) < 2e-2
    alone = prepare(kept("first")).price(2**15, SEED)
    grid = (np.arange(2000) + 0.5) / 2000
    mean = np.mean([1.0 - hit_by("up", 112.0, maturity=t, **{k: v for k, v in FLAT.items() if k != "maturity"})
                    for t in grid])
    assert abs(alone.mean - exp(-0.04) * mean) < 4 * alone.error < 1e-2
