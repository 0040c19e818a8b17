"""`mcx verify` against synthetic dealers: a hidden change must be found, and no alarm raised where there is none.

A dealer prices with numbers of his own (another seed), so a hidden value is found up to the errors of both.
"""

from __future__ import annotations

import math
from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from closed_forms import european
from front_door import EXAMPLES
from helpers import request_of
from scipy.optimize import brentq

from mcx.checked.dealer_quote import DealerQuote
from mcx.dates.dating import date_on
from mcx.estimators.bands import root_of_squares
from mcx.estimators.batches import Sampling
from mcx.estimators.estimate import Estimate
from mcx.estimators.levers import Lever
from mcx.estimators.plan import Precision
from mcx.estimators.price import prepare
from mcx.estimators.readings import value_readings
from mcx.estimators.roots import SCANNED, solutions
from mcx.estimators.verify import Bench
from mcx.faults import Place
from mcx.leaves.jacobian import moved

SEED, DEALER = 0x3C6EF372FE94F82B, 0x1F83D9ABFB41BD6B
PATHS = 1 << 16
DOUBT = {"vol": 0.015, "yield": 0.004, "correlation": 0.1, "funding": 0.0025, "rates": 0.001}
HIDDEN = {"vol": 0.02, "yield": 0.006, "correlation": -0.15, "funding": 0.004, "rate": -0.004}
CONTRACTS = {  # file, number of the contract in it
    "autocall": ("harbour_lantern.yaml", 0),
    "reverse convertible": ("quoted_note.yaml", 0),
    "worst of three": ("barrier_reverse_convertible.yaml", 3),  # watched at the end: daily would take a minute
    "asian": ("asian.yaml", 0),
}


def bench_of(request, number: int = 0, paths: int = PATHS, seed: int = SEED, uncertainty: dict | None = None) -> Bench:
    """A contract of a request on its market, the doubt about its inputs replaced where some is given."""
    market = request.market
    if uncertainty is not None:
        quoted = next(iter(market.assets.values())).spot
        market = replace(market, uncertainty={key: replace(quoted, value=width) for key, width in uncertainty.items()})
    dated, faults = date_on(request.contracts[number], market)
    ready, refused = prepare(dated, market)
    assert not faults and not refused
    return Bench(ready, market, Precision(paths=paths), seed=seed)


def read(name: str):
    file, number = CONTRACTS[name]
    text = (EXAMPLES / file).read_text(encoding="utf-8")
    daily = "watched: {from: 2026-12-02, until: final, every: 1 business day}"
    return request_of(text.replace(daily, "watched: final")), number


@cache
def bench(name: str) -> Bench:
    return bench_of(*read(name), uncertainty=DOUBT)


def mid(bench: Bench, price: float, **stated: object) -> DealerQuote:
    """A dealer's mid, in the unit of our price."""
    unit = "percent of notional" if bench.contract.notional else "per unit"
    at = "2026-12-01" if bench.market.valuation else "0y"
    return DealerQuote("a dealer", Place("quote", 1, 1), at, at, "mid", unit, False, True, price=price, **stated)


def levers_of(name: str) -> list[Lever]:
    return [lever for lever in bench(name).at({}).levers if lever.kind in HIDDEN]


@pytest.mark.parametrize(("name", "number"), [
    (name, number) for name in CONTRACTS for number in range(len(levers_of(name)))])
def test_a_hidden_input_is_found(name: str, number: int):
    """The dealer holds one input to be another than we do, everything else alike: its value is among the solutions,
    each of which meets the quote on fresh numbers too."""
    ours, lever = bench(name), levers_of(name)[number]
    hidden = HIDDEN[lever.kind]
    dealers = ours.revaluer.price(moved(ours.market, lever.shifts(hidden)), Sampling(DEALER, PATHS))[1]
    found = ours.at({}).implied(lever, dealers.value).solutions.found
    distances = [(each.move - hidden) / math.hypot(each.error, dealers.standard_error / each.slope) for each in found]
    assert min(map(abs, distances), default=math.inf) < 4.0, (lever.name, lever.subject, distances)
    assert all(abs(each.z) < 4.0 for each in found)


def test_a_parallel_vol_is_found_by_every_contract():
    """The levers of all assets together are among those tested, and the inputs of each kind."""
    kinds = {(lever.kind, lever.subject == "all") for name in CONTRACTS for lever in levers_of(name)}
    assert {kind for kind, _ in kinds} == set(HIDDEN) and ("vol", True) in kinds and ("correlation", True) in kinds


def readings_of(name: str) -> list[str]:
    return [each.name for each in bench(name).at({}).readings.readings if each.differs]


@pytest.mark.parametrize("name", CONTRACTS)
def test_a_hidden_reading_is_found(name: str):
    """The dealer reads the contract otherwise: that reading is named as one that closes the gap, unless it makes no
    difference that can be seen; one that leaves a gap far beyond the errors is not named."""
    ours = bench(name)
    dealer = value_readings(ours.ready.dated, ours.market, paths=PATHS, seed=DEALER)
    assert len(dealer.readings) >= 3
    gap_seen = 0
    for reading in (each for each in dealer.readings if each.differs):
        here = ours.at({})
        meets = reading.price.value
        gap = replace(here.price, value=meets - here.price.value)
        found = next(each for each in here.readings.readings if each.name == reading.name)
        both = math.hypot(found.price.standard_error, reading.price.standard_error)
        assert abs(found.price.value - meets) < 4.0 * both, reading.name
        closing = ours.closing(here, gap, meets, 0.0)
        if abs(gap.value) > 8.0 * here.price.standard_error:
            gap_seen += 1
            assert reading.name in closing
            for other in (each for each in here.readings.readings if each.name in closing):
                assert abs(other.price.value - meets) <= 4.0 * other.price.standard_error
    assert gap_seen >= 1


@pytest.mark.parametrize("name", CONTRACTS)
def test_false_alarms(name: str):
    """Of 200 quotes at our own value on inputs drawn from their stated doubt about 90 % are inside the input band."""
    ours = bench_of(*read(name), paths=1 << 12, uncertainty=DOUBT)
    here = ours.at({})
    band = root_of_squares(here.effects)
    draws = np.random.default_rng(7).standard_normal((200, len(here.effects))) / 1.6448536269514722  # 90 % within ±1
    inside = 0
    for shares in draws:
        shifts = {}
        for effect, share in zip(here.effects, shares, strict=True):
            shifts |= effect.lever.doubt(float(share))
        dealers = ours.revaluer.price(moved(ours.market, shifts), ours.sampling)[1]
        inside += abs(dealers.value - here.price.value) <= band
    assert abs(inside - 180) < 4.0 * math.sqrt(200 * 0.9 * 0.1), inside


CALL = """contract: Call
currency: EUR
units: 1
assets: [harbour]
payoff: european
terms: {side: call, strike: 105, expiry: 1y}
---
market: 0y
rates: {EUR: 3%}
assets:
  harbour: {spot: 100, currency: EUR, yield: 1%, vol: VOL}
"""
AT = {"spot": 100.0, "strike": 105.0, "maturity": 1.0, "rate": 0.03, "dividend_yield": 0.01}


def vol_lever(ours: Bench) -> Lever:
    return next(lever for lever in ours.at({}).levers if lever.kind == "vol")


def test_implied_vol_round_trip():
    """Priced at 27 % with our seed, the implied vol is 27 % to 1e-6 wherever we start from."""
    dealers = bench_of(request_of(CALL.replace("VOL", "27%"))).valuation.price.value
    for start in ("18%", "40%"):
        ours = bench_of(request_of(CALL.replace("VOL", start)))
        found = ours.at({}).implied(vol_lever(ours), dealers).solutions.found
        assert len(found) == 1
        assert vol_lever(ours).level(found[0].move) == pytest.approx(0.27, abs=1e-6)


def test_implied_vol_against_the_closed_form():
    """The vol at which the Black formula gives the price, found by many seeds: within four of its stated errors each,
    and about 95 % of the time within 1.96 of them."""
    price = european("call", vol=0.24, **AT)
    truth = brentq(lambda vol: european("call", vol=vol, **AT) - price, 0.01, 1.0, xtol=1e-14)
    distances = []
    for seed in range(60):
        ours = bench_of(request_of(CALL.replace("VOL", "21%")), paths=1 << 12, seed=seed)
        found = ours.at({}).implied(vol_lever(ours), price).solutions.found
        distances.append((0.21 + found[0].move - truth) / found[0].error)
    assert max(map(abs, distances)) < 4.0
    inside = sum(abs(distance) < 1.96 for distance in distances)
    assert abs(inside - 57) <= 4.0 * math.sqrt(60 * 0.95 * 0.05), inside


TWO_WAYS = """contract: Knock-in far below, call far above
currency: EUR
notional: 1000000
assets: [harbour]
payoff: autocall
terms:
  initial: 100
  observations: {count: 4, until: 2y}
  first_call: observations.first
  call_barrier: 108%
  coupon_barrier: 108%
  coupon: 4%
  memory: true
  knock_in: 60%
  watched: observations.last
  strike: 100%
---
market: 0y
rates: {EUR: 2%}
funding: {EUR: 0 bp}
assets:
  harbour: {spot: 100, currency: EUR, yield: 4%, vol: 20%}
"""


def test_an_autocall_whose_vega_changes_sign_has_two_implied_vols():
    """The price rises with vol while calls become likelier and falls when the knock-in does: a quote above our value at
    low vol is met twice, and the two slopes have different signs. Each is confirmed by pricing at it anew."""
    ours = bench_of(request_of(TWO_WAYS))
    lever = vol_lever(ours)
    low = ours.revaluer.price(moved(ours.market, lever.shifts(-0.15)), ours.sampling)[1]
    high = ours.revaluer.price(moved(ours.market, lever.shifts(-0.09)), ours.sampling)[1]
    assert high.value > low.value + 20 * low.standard_error, "the vega is above 0 at low vols"
    meets = 0.5 * (low.value + high.value)
    found = ours.at({}).implied(lever, meets).solutions.found
    assert len(found) == 2
    assert found[0].slope > 0.0 > found[1].slope
    for each in found:
        price = ours.revaluer.price(moved(ours.market, lever.shifts(each.move)), Sampling(DEALER, PATHS))[1]
        assert abs(price.value - meets) < 4.0 * math.hypot(price.standard_error, each.error * each.slope)


def test_what_cannot_be_met_is_none_in_the_range():
    """A call worth more than its spot has no implied vol, and a quote below its floor none either."""
    ours = bench_of(request_of(CALL.replace("VOL", "21%")))
    for price in (120.0, -1.0):
        found = ours.at({}).implied(vol_lever(ours), price).solutions
        assert found.found == () and found.moves_price
        assert (found.low, found.high) == pytest.approx((-0.20, 0.40))


def test_two_solutions_between_two_points_of_the_scan():
    """A parabola that dips below 0 for less than a step of the scan: both ends of the dip."""
    def distance(move: float, _: Sampling) -> Estimate:
        return Estimate((move - 0.512) ** 2 - 1e-6, 1e-9, 1 << 12)

    found = solutions(distance, -1.0, 1.0, Sampling(1, 1 << 12)).found
    assert [each.move for each in found] == pytest.approx([0.511, 0.513], abs=1e-8)


@pytest.mark.parametrize("name", ["reverse convertible", "asian"])
def test_the_smallest_joint_move_meets_the_quote(name: str):
    """It is no further than the cheapest single input that has a stated width, and fresh numbers confirm it."""
    here = bench(name).at({})
    meets = here.price.value - 0.8 * root_of_squares(here.effects)
    joint = here.joint(meets)
    alone = (here.implied(lever, meets) for lever in levers_of(name) if lever.subject != "all")
    single = [abs(each.move) / implied.lever.width for implied in alone for each in implied.solutions.found]
    assert joint.size == pytest.approx(0.8, rel=0.1)
    assert joint.size < min(single) and abs(joint.z) < 4.0


def test_a_term_is_solved():
    """The coupon of the note that makes it worth par; priced at it with other numbers it is par."""
    ours = bench("reverse convertible")
    found = ours.verify(mid(ours, 0.98), solve="coupon", target=1.0).solved
    assert len(found.solutions.found) == 1
    each = found.solutions.found[0]
    text = (EXAMPLES / "quoted_note.yaml").read_text().replace("coupon: 3.0%", f"coupon: {100 * each.move:.12g}%")
    assert "coupon: 3.0%" not in text
    there = bench_of(request_of(text), seed=DEALER).valuation.price
    assert abs(there.value - 1.0) < 4.0 * math.hypot(there.standard_error, each.error * each.slope)
    years = ours.ready.dated  # the coupon's slope is the annuity, known without simulation
    assert each.slope == pytest.approx(sum(1.0 for _ in years.schedules["coupon_dates"]) / 4, rel=0.1)


def test_more_paths_may_move_a_solution_out_of_its_stretch():
    """What the first paths find at 0.05, all of them find several steps of the scan away; and only once."""
    def distance(move: float, sampling: Sampling) -> Estimate:
        return Estimate(move - (0.05 if sampling.paths <= SCANNED else 0.47), 0.1, sampling.paths)

    found = solutions(distance, -1.0, 1.0, Sampling(1, 2 * SCANNED)).found
    assert [each.move for each in found] == pytest.approx([0.47], abs=1e-8)


def test_a_solution_near_the_end_of_the_range_that_only_all_paths_see():
    """The first paths would have it just outside."""
    def distance(move: float, sampling: Sampling) -> Estimate:
        return Estimate(move - (1.02 if sampling.paths <= SCANNED else 0.97), 0.1, sampling.paths)

    found = solutions(distance, -1.0, 1.0, Sampling(1, 2 * SCANNED)).found
    assert [each.move for each in found] == pytest.approx([0.97], abs=1e-8)
