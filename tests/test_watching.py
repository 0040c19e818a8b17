"""Continuous watching of two sides, of moments and of several assets: laws, bounds and what is refused.

One side of one asset under term structures is in `test_continuous.py`; published tables are in `published/`.
"""

from __future__ import annotations

from functools import cache
from math import exp, sqrt
from pathlib import Path

import mpmath
import numpy as np
import pytest
from closed_forms import barrier_option, double_no_touch, hit_by
from helpers import Ready, check, document, prepare, price_of, ready_of, request_of
from scipy import stats

import mcx
from mcx.checked.load import load
from mcx.checked.read_payoff import read_payoff
from mcx.dates.dating import date_contract
from mcx.estimators import bracket
from mcx.leaves.market_map import MarketMap
from mcx.tape.bridges import bridge_clear, bridge_corridor, bridge_range
from mcx.tape.registers import lower
from mcx.tape.unroll import unroll
from mcx.text.documents import parse_documents

HERE = Path(__file__).parent
SEED = 0x428A2F98D728AE22
FLAT = {"spot": 100.0, "maturity": 1.0, "rate": 0.04, "dividend_yield": 0.015, "vol": 0.22}
MARKET = "---\nmarket: 0y\nrates: {EUR: 4%}\nassets:\n  harbour: {spot: 100, currency: EUR, yield: 1.5%, vol: 22%}\n"
ALWAYS = "{continuous: [0y, 1y]}"
COUNTED = """payoff: counted
about: Barriers, with levels read on dates that do not matter.
terms:
  lower:   {type: level}
  upper:   {type: level}
  watched: {type: watch}
  dates:   {type: dates}
  expiry:  {type: date}
running:
  touched: {ever: any(spot <= lower) or any(spot >= upper), at: watched}
  seen: {start: 0}
events:
  - at: dates
    set: {seen: "seen + worst(spot) * 0"}
  - at: dates
    name: touched by then
    if: touched
    then:
      - pay: 0
  - at: expiry
    pay: (0 if touched else 1) + seen
---
"""


# The joint law of a bridge's minimum and maximum


def exact_corridor(d0: float, d1: float, width: float, variance: float) -> float:
    """The series of images in fifty digits."""
    with mpmath.workdps(50):
        x, y, w, v = map(mpmath.mpf, (d0, d1, width, variance))
        reach = int(12 * mpmath.sqrt(v) / w) + 8
        return float(sum(mpmath.exp(-2 * n * w * (n * w + y - x) / v) - mpmath.exp(-2 * (n * w + x) * (n * w + y) / v)
                         for n in range(-reach, reach + 1)))


def test_corridor_to_the_last_digits():
    """Between barriers near and far, in steps short and long for their distance, the chance is right to 1e-14."""
    rng = np.random.default_rng(0x3956C25BF348B538)
    for spread in 10.0 ** rng.uniform(-3.0, 1.0, 60):
        width = 10.0 ** rng.uniform(-3.0, 1.0)
        d0, d1 = width * rng.beta(0.5, 0.5, 2)
        found = bridge_corridor(d0, d1, width, spread * width**2)
        assert abs(found - exact_corridor(d0, d1, width, spread * width**2)) < 1e-14


def test_corridor_has_its_marginals():
    """With one barrier far away only the other is left; the order of the ends and the sides do not matter."""
    d0, d1, variance = 0.11, 0.3, 0.05
    assert bridge_corridor(d0, d1, 40.0, variance) == pytest.approx(bridge_clear(d0, d1, variance), abs=1e-15)
    for width in (0.31, 0.4, 0.8):
        one = bridge_corridor(d0, d1, width, variance)
        assert one == pytest.approx(bridge_corridor(d1, d0, width, variance), abs=1e-15)
        assert one == pytest.approx(bridge_corridor(width - d0, width - d1, width, variance), abs=1e-15)
    assert bridge_corridor(d0, d1, 0.3, variance) == bridge_corridor(-d0, d1, 0.9, variance) == 0.0


def test_drawn_minimum_and_maximum_against_a_fine_grid():
    """Drawn by inversion, minimum and maximum stay within a corridor as often as a bridge on a grid of 2^11 steps does,
    with both barriers moved by 0.5826 deviations of a step (Broadie, Glasserman & Kou 1997)."""
    rng, x1, variance, paths, steps = np.random.default_rng(0x59F111F1B605D019), 0.07, 0.06, 4000, 1 << 11
    walk = np.cumsum(rng.standard_normal((paths, steps)) * sqrt(variance / steps), axis=1)
    walk += (x1 - walk[:, -1:]) * np.arange(1, steps + 1) / steps
    lowest, highest = np.minimum(walk.min(axis=1), 0.0), np.maximum(walk.max(axis=1), x1)
    u, w = rng.uniform(size=(2, 40_000))
    low = 0.5 * (x1 - np.sqrt(x1**2 - 2.0 * variance * np.log(u)))
    high = low + bridge_range(-low, x1 - low, variance, w)
    moved = 0.5826 * sqrt(variance / steps)
    for a, b in ((-0.1, 0.2), (-0.15, 0.15), (-0.3, 0.22)):
        inside = np.mean((lowest > a + moved) & (highest < b - moved))
        law = bridge_corridor(-a, x1 - a, b - a, variance)
        assert abs(inside - law) < 4 * sqrt(law * (1 - law) / paths)
        assert abs(np.mean((low > a) & (high < b)) - law) < 4 * sqrt(law * (1 - law) / len(u))
    marginal = stats.kstest(high[:20_000], lambda b: 1.0 - np.exp(-2.0 * b * (b - x1) / variance))
    assert marginal.pvalue > 1e-3


# Two sides of one asset


@pytest.mark.parametrize(("lower", "upper"), [(85.0, 120.0), (95.0, 104.0), (99.9, 150.0), (60.0, 170.0)])
def test_double_no_touch(lower: float, upper: float):
    """Near and far barriers, one all but at the spot: the probability by quadrature."""
    text = document("double_touch", kind="no touch", lower_barrier=lower, upper_barrier=upper, cash=1, watched=ALWAYS,
                    expiry="1y")
    truth = exp(-0.04) * double_no_touch(lower, upper, **FLAT)
    check(price_of(text + MARKET, 2**21, SEED), truth, sharp=2e-2)


@pytest.mark.parametrize("count", [1, 12, 100])
@pytest.mark.parametrize("everything_drawn", [False, True])
def test_dates_added_to_a_window_do_not_move_the_price(count: int, everything_drawn: bool):
    """Cutting the window at dates on which the flag is read leaves its law as it was, weighed or drawn."""
    text = COUNTED + document("counted", lower=85, upper=120, watched=ALWAYS, dates=f"{{count: {count}, until: 1y}}",
                              expiry="1y") + MARKET
    paths = 2**14 if everything_drawn else 2**17
    estimate = prepare(text, everything_drawn).price(paths, SEED)
    check(estimate, exp(-0.04) * double_no_touch(85.0, 120.0, **FLAT), sharp=3e-2)


@cache
def both_ways(file: Path, number: int) -> tuple[Ready, Ready]:
    request = load([file])
    return ready_of(request, number), ready_of(request, number, everything_drawn=True)


@pytest.mark.parametrize(("name", "number"), [
    ("payoffs/examples/barrier.yaml", 0), ("payoffs/examples/barrier.yaml", 4),
    ("payoffs/examples/double_barrier.yaml", 1), ("payoffs/examples/autocall.yaml", 0),
    ("payoffs/examples/touch_at_hit.yaml", 0), ("payoffs/examples/twin_win.yaml", 0),
    ("tests/corners/hits.yaml", 0), ("tests/corners/hits.yaml", 1),
])
def test_weighing_and_drawing_agree_and_weighing_is_surer(name: str, number: int):
    """Flags as probabilities and as draws give every output the same mean; the price then varies no more."""
    weighed, drawn = (ready.by_path(2**15, seed) for ready, seed in
                      zip(both_ways(HERE.parent / name, number), (SEED, SEED + 1)))
    assert set(weighed) == set(drawn)
    for output, values in weighed.items():
        error = sqrt((np.var(values) + np.var(drawn[output])) / len(values))
        assert abs(values.mean() - drawn[output].mean()) <= 4 * error + 1e-9, output
    assert np.var(weighed["price"]) <= 1.03 * np.var(drawn["price"])


def test_barriers_at_and_beyond_special_levels():
    """A barrier at the spot is touched at once; crossed barriers leave no room; at the strike it is as any other."""
    def untouched(lower: float, upper: float) -> float:
        text = document("double_touch", kind="no touch", lower_barrier=lower, upper_barrier=upper, cash=1,
                        watched=ALWAYS, expiry="1y")
        return price_of(text + MARKET, 4096, SEED).mean

    assert untouched(100, 130) == untouched(80, 100) == untouched(120, 90) == untouched(100, 100) == 0.0
    assert untouched(1e-9, 1e9) == pytest.approx(exp(-0.04), rel=1e-14)
    at_once = document("touch_at_hit", direction="down", barrier=100, cash=7, watched=ALWAYS)
    assert price_of(at_once + MARKET, 4096, SEED).mean == 7.0
    strike = document("barrier", side="call", direction="down", knock="out", strike=95, barrier=95, watched=ALWAYS,
                      expiry="1y")
    check(price_of(strike + MARKET, 2**19, SEED), barrier_option("call", "down", "out", 95.0, 95.0, **FLAT), sharp=1e-2)


# The moment of a hit

MOMENT = """payoff: moment
about: The time of the first touch.
terms:
  barrier: {type: level}
  watched: {type: watch}
  dates:   {type: dates}
running:
  touched: {ever: spot <= barrier, at: watched}
events:
  - at: {once: touched}
    pay: years
  - at: dates
    pay: 0 if touched else 0
---
"""


@pytest.mark.parametrize(("direction", "barrier", "dates"), [
    ("down", 85.0, 1), ("down", 99.0, 1), ("down", 92.0, 5), ("up", 115.0, 1), ("up", 103.0, 5)])
def test_moments_follow_the_law_of_first_passage(direction: str, barrier: float, dates: int):
    """The drawn times of the hit, in one step and in several, have the distribution function of the first passage of a
    Brownian motion with drift (Borodin & Salminen 2002, formula 2.2.0.2)."""
    market = MARKET.replace("rates: {EUR: 4%}", "rates: {EUR: 0%}")
    definition = MOMENT if direction == "down" else MOMENT.replace("<=", ">=")
    text = document("moment", barrier=barrier, watched=ALWAYS, dates=f"{{count: {dates}, until: 1y}}")
    paid = prepare(definition + text + market, everything_drawn=True).by_path(40_000, SEED)["price"]
    paid = paid[paid > 0.0]
    flat = {"spot": 100.0, "rate": 0.0, "dividend_yield": 0.015, "vol": 0.22}
    ever = hit_by(direction, barrier, maturity=1.0, **flat)
    assert abs(len(paid) / 40_000 - ever) < 4 * sqrt(ever / 40_000)
    law = np.vectorize(lambda t: hit_by(direction, barrier, maturity=t, **flat) / ever if t > 0.0 else 0.0)
    assert stats.kstest(paid, law).pvalue > 1e-3


def test_a_hit_is_paid_from_its_calendar_day():
    """Between two dates the day of the hit decides what falls due and when: over all days the chance of the first
    passage in each, times the discount factor two business days later."""
    text = """contract: paid by the day
currency: EUR
units: 1
assets: [harbour]
start: 2026-12-01
settlement: 2 business days
calendar: {holidays: none, roll: following}
payoff: touch_at_hit
terms: {direction: up, barrier: 104, cash: 1, watched: {continuous: [2026-12-01, 2026-12-31]}}
---
market: 2026-12-01
rates: {EUR: 100%}
assets:
  harbour: {spot: 100, currency: EUR, yield: 96%, vol: 30%}
"""
    flat = {"spot": 100.0, "rate": 1.0, "dividend_yield": 0.96, "vol": 0.3}
    chances = [hit_by("up", 104.0, maturity=day / 365, **flat) for day in range(1, 31)]
    truth, before, start = 0.0, 0.0, np.datetime64("2026-12-01")
    for day, chance in enumerate(chances, start=1):
        rolled = np.busday_offset(start + day, 0, roll="backward")  # the lag counts from a weekend as from its Friday
        due = (np.busday_offset(rolled, 2) - start).astype(int)
        truth, before = truth + (chance - before) * exp(-1.0 * due / 365), chance
    check(price_of(text, 2**19, SEED), truth, sharp=2e-3)


# Several assets

TWO = """---
market: 0y
rates: {EUR: 4%}
assets:
  harbour: {spot: 100, currency: EUR, yield: 1.5%, vol: 22%}
  lantern: {spot: 100, currency: EUR, yield: 1.5%, vol: 22%}
correlation: {harbour/lantern: RHO}
"""


def bounds(rho: str, pieces: int, paths: int, count: int = 4) -> tuple[np.ndarray, np.ndarray]:
    """The lower and upper value of a worst-of no-touch at 85 on each path."""
    text = COUNTED + document("counted", assets="[harbour, lantern]", lower=85, upper=1e9, watched=ALWAYS,
                              dates=f"{{count: {count}, until: 1y}}", expiry="1y") + TWO.replace("RHO", rho)
    request = request_of(text)
    dated, _ = date_contract(request.contracts[0], None)
    market = MarketMap(request.market, request.contracts[0])
    unrolled = unroll(dated, nodes=market.nodes(), pieces=pieces)
    assert unrolled.bracketed and {note.law for note in unrolled.watches} == {"bracketed"}
    found = Ready(dated, request.market, unrolled, lower(unrolled.tape, market.values(unrolled.tape.leaves)))
    values = found.by_path(paths, SEED)
    return values["price"] - values["gap: price"] / 2, values["price"] + values["gap: price"] / 2


def test_independent_assets_lie_between_the_bounds():
    """Without correlation the chance is the product of two closed forms; bounds hold it and close with the steps."""
    truth = exp(-0.04) * (1.0 - hit_by("down", 85.0, **FLAT)) ** 2
    widths = []
    for pieces in (1, 16, 64):
        low, high = bounds("0%", pieces, 2**15)
        assert np.all(low <= high + 1e-13) and np.all(low > -1e-13)
        error = np.std(low) / sqrt(len(low))
        assert low.mean() - 4 * error <= truth <= high.mean() + 4 * error
        widths.append(high.mean() - low.mean())
    assert widths[0] > 5 * widths[1] > 20 * widths[2] > 0.0


def test_one_asset_twice_is_the_upper_bound():
    """Two assets that move as one survive together as each does: on each path the upper bound is the single asset's
    chance, and the lower one comes up to it."""
    single = COUNTED + document("counted", lower=85, upper=1e9, watched=ALWAYS, dates="{count: 4, until: 1y}",
                                expiry="1y") + MARKET
    low, high = bounds("100%", 1, 2**15)
    assert high.mean() == pytest.approx(exp(-0.04) * (1.0 - hit_by("down", 85.0, **FLAT)), abs=4 * high.std() / 2**7.5)
    check(prepare(single).price(2**18, SEED), exp(-0.04) * (1.0 - hit_by("down", 85.0, **FLAT)), sharp=5e-3)
    finer, _ = bounds("100%", 64, 2**13)
    assert low.mean() < finer.mean() + 4 * finer.std() / 2**6.5


# What is refused

HITS = """payoff: hits
about: Two hits.
terms:
  watched: {type: watch}
running:
  up: {ever: any(spot > 120), at: watched}
  down: {ever: any(spot < 80), at: watched}
  out: {ever: any(spot < 80) or any(spot > 120), at: watched}
events:
  - at: {once: up}
    then: [{pay: 1}, end]
    if: true
  - at: {once: down}
    pay: 1
---
"""


@pytest.mark.parametrize(("old", "new", "assets", "words"), [
    ("", "", "[harbour]", "which of the two comes first is not known"),
    ("{once: up}\n    then: [{pay: 1}, end]", "{once: out}\n    then: [{pay: 1}]", "[harbour]",
     "'out' waits for the first exit from between two levels, and the law of its moment is not worked out; pay on a "
     "date whether it came, which is exact ('- {at: expiry, if: out, then: [{pay: 1}]}'), or watch it on dates"),
    (", end]", "]", "[harbour, lantern]", "waits for several"),
])
def test_hits_without_a_law_are_refused(old: str, new: str, assets: str, words: str):
    """The fault stands at the event that waits for the hit."""
    text = HITS.replace(old, new) + document("hits", assets=assets, watched=ALWAYS) + TWO.replace("RHO", "20%")
    dated, _ = date_contract(request_of(text).contracts[0], None)
    fault = unroll(dated, nodes=()).faults[0]
    assert words in fault.text and 8 <= fault.place.line <= 14


WRONG = """payoff: wrong
terms:
  watched: {type: watch}
  dates:   {type: dates}
  weekly:  {type: number, per: dates}
  later:   {type: dates, per: dates}
let:
  far: spot + count
running:
  hit: {ever: spot > 120, at: watched}
  never: {always: spot > 120, at: watched}
  count: {total: 1, at: dates}
events:
  - at: {once: hit}
    pay: WHAT
"""


@pytest.mark.parametrize(("old", "new", "fault"), [
    ("once: hit", "once: hat", "14:16: there is no running value 'hat'; did you mean 'hit'?"),
    ("once: hit", "once: never", "14:16: 'once' waits for a running value of 'ever'; 'never' is of 'always'"),
    ("once: hit", "once: count", "14:16: 'once' waits for a running value of 'ever'; 'count' is of 'total'"),
    ("WHAT", "count * 2", "15:10: at the moment of a hit only terms, 'years' and the level of the watched asset can be "
                          "read; 'count' is a running value"),
    ("WHAT", "far - 1", "15:10: at the moment of a hit only terms, 'years' and the level of the watched asset can be "
                        "read; 'count' is a running value"),
    ("WHAT", "1 + nth", "15:14: at the moment of a hit only terms, 'years' and the level of the watched asset can be "
                        "read; 'nth' belongs to a date"),
    ("WHAT", "weekly", "15:10: at the moment of a hit only terms, 'years' and the level of the watched asset can be "
                       "read; 'weekly' has one value for each date of 'dates'"),
    ("WHAT", "previous(spot, 1)", "15:10: at the moment of a hit only terms, 'years' and the level of the watched "
                                  "asset can be read; 'previous' belongs to a date"),
    ("WHAT", "1\n    due: later", "15:5: 'later' has a date for each date of a schedule, and the moment of a hit is "
                                  "none of them; expected a 'date' term or 'same day'"),
])
def test_what_may_be_read_at_a_hit_is_checked_with_the_definition(old: str, new: str, fault: str):
    """Each wrong word is a fault at its place, before any contract uses the definition."""
    documents, _ = parse_documents(WRONG.replace(old, new).replace("WHAT", "1").encode(), "wrong.yaml")
    _, faults = read_payoff(documents[0])
    assert [str(one).removeprefix("wrong.yaml:") for one in faults] == [fault]


# Through the front door


def test_bounds_stand_beside_the_price(tmp_path: Path):
    """The price of a worst-of is the middle of its bounds, refined until they are a quarter of what was asked apart; the same seed
    gives the same, whatever the threads, and a record reproduces."""
    example = (HERE.parent / "payoffs/examples/worst_of_watched.yaml").read_text().split("---\n")
    case, record = tmp_path / "case.yaml", tmp_path / "record.json"
    case.write_text("---\n".join(example[-2:]))
    rough, fine = mcx.price(case, within="80bp", record=record), mcx.price(case, within="2bp")
    again = mcx.price(case, within="80bp", threads=1)
    for result, within in ((rough, 80e-4), (fine, 2e-4)):
        found = result.bracket
        assert found.reached and 0.0 < found.width < found.target == within / 4
        assert found.lower < result.price < found.upper and found.upper - found.lower == pytest.approx(found.width)
        assert {other.name for other in found.others} >= {"leg: capital at risk", "condition: knocked in"}
    assert fine.bracket.steps > rough.bracket.steps == rough.bracket.unrefined and fine.bracket.cost > 1.0
    assert (again.price, again.bracket) == (rough.price, rough.bracket)
    assert mcx.replay(record).identical
    assert [watch.law for watch in mcx.readback(case).watches] == ["bracketed"]


def test_bounds_that_stay_apart_are_warned_about(monkeypatch: pytest.MonkeyPatch, tmp_path: Path):
    """Where refining stops before the bounds are as close as they should be, the result says so."""
    monkeypatch.setattr(bracket, "PIECES", (1,))
    case = tmp_path / "case.yaml"
    case.write_text(COUNTED + document("counted", assets="[harbour, lantern]", lower=85, upper=1e9, watched=ALWAYS,
                                       dates="1y", expiry="1y") + TWO.replace("RHO", "30%"))
    result = mcx.price(case, paths=2**14)
    assert not result.bracket.reached and any("bounds of the price" in text for text in result.warnings)
