"""The other readings of a contract: what they mean, and that each is priced as if it were the contract itself."""

from __future__ import annotations

from functools import cache
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
from closed_forms import barrier_option, slice_of_payoff
from drawn import reference_results
from helpers import Ready, prepare, price_of, request_of

from mcx.checked.library import shipped_text
from mcx.checked.load import Request, load
from mcx.dates.dated_contract import DatedContract
from mcx.dates.dating import date_on
from mcx.dates.otherwise import DatedOtherwise, date_otherwise
from mcx.estimators.readings import ReadingsValuation, value_readings
from mcx.leaves.market_map import MarketMap
from mcx.machine.run import values_by_path
from mcx.tape.otherwise import UnrolledOtherwise, unroll_otherwise
from mcx.tape.registers import lower
from mcx.tape.unroll import unroll
from mcx.tape.verify import problems

EXAMPLES = Path(__file__).resolve().parent.parent / "payoffs" / "examples"
FAMILIES = ("autocall", "snowball_autocall", "reverse_convertible", "barrier_reverse_convertible", "barrier", "touch",
            "asian")
SEED = 0x9BDC06A725C71235
HELD = [("autocall", 1), ("snowball_autocall", 1), ("reverse_convertible", 1),
        ("barrier_reverse_convertible", 2), ("barrier_reverse_convertible", 3), ("barrier", 0), ("barrier", 1),
        ("barrier", 2), ("touch", 1), ("asian", 0), ("asian", 1), ("asian", 2)]  # each kind of watch


@cache
def request(example: str) -> Request:
    return load([EXAMPLES / f"{example}.yaml"])


def dated_of(made: Request, number: int = 0) -> DatedContract:
    dated, faults = date_on(made.contracts[number], made.market)
    assert dated is not None, faults
    return dated


@cache
def unrolled(example: str, number: int) -> tuple[DatedContract, UnrolledOtherwise]:
    made = request(example)
    dated = dated_of(made, number)
    nodes = MarketMap(made.market, dated.contract).nodes()
    return dated, unroll_otherwise(dated, date_otherwise(dated), nodes=nodes, everything_drawn=True)


def reading_of(dated: DatedContract, name: str) -> DatedOtherwise:
    return next(other for other in date_otherwise(dated) if other.reading.name == name)


CASES = [(example, number) for example in FAMILIES for number in range(len(request(example).contracts))]


@pytest.mark.parametrize(("example", "number"), HELD)
def test_every_reading_is_what_the_plain_walk_makes_of_it(example: str, number: int):
    """On the draws of the joint tape the second implementation, given a reading as if it were the contract, pays the
    same on every path."""
    dated, joint = unrolled(example, number)
    market = request(example).market
    assert not problems(joint.tape)
    leaves = MarketMap(market, dated.contract)
    program = lower(joint.tape, leaves.values(joint.tape.leaves))
    paths = 2 if len(joint.grid.times) > 100 else 32
    values = dict(zip([output.name for output in joint.tape.outputs],
                      values_by_path(program, seed=SEED, paths=paths), strict=True))
    parts = SimpleNamespace(tape=joint.tape, grid=joint.grid)
    for name, one in [("price", dated)] + [(f"reading: {other.reading.name}", other.dated) for other in joint.readings]:
        plain = [result.price for result in reference_results(Ready(one, market, parts, program), range(paths), SEED)]
        size = max(1.0, *map(abs, plain))
        np.testing.assert_allclose(values[name], plain, rtol=1e-10, atol=1e-12 * size, err_msg=name)
        if name != "price":
            difference = values[name.replace("reading", "difference")]
            np.testing.assert_array_equal(difference, values[name] - values["price"])


@pytest.mark.parametrize(("example", "number"), CASES)
def test_every_reading_is_valued_or_says_why_not(example: str, number: int):
    dated, joint = unrolled(example, number)
    names = [other.reading.name for other in (*joint.readings, *joint.same, *joint.refused)]
    assert sorted(names) == sorted(reading.name for reading in dated.contract.payoff.readings)
    assert all(other.faults for other in joint.refused)


# Each reading beside the same thing written out by hand: replacements in the contract, or in its definition.
IN_THE_CONTRACT = [
    ("autocall", "knock-in at the end", "watched: {continuous: [2026-12-01, observations.last]}",
     "watched: observations.last"),
    ("autocall", "knock-in on the observations", "watched: {continuous: [2026-12-01, observations.last]}",
     "watched: observations"),
    ("autocall", "knock-in at each close", "watched: {continuous: [2026-12-01, observations.last]}",
     "watched: {from: 2026-12-01, until: observations.last, every: 1 business day}"),
    ("autocall", "memory", "memory: false", "memory: true"),
    ("autocall", "one business day later", "observations: {from: 2027-06-01, until: 2029-12-03, every: 6 months}",
     "observations: [2027-06-02, 2027-12-02, 2028-06-02, 2028-12-04, 2029-06-04, 2029-12-04]"),
    ("barrier_reverse_convertible", "knock-in all the time", "watched: final",
     "watched: {continuous: [2026-12-01, final]}"),
    ("barrier_reverse_convertible", "one business day later", "final: 2027-11-24", "final: 2027-11-25"),
    ("barrier", "barrier at expiry", "watched: {continuous: [0y, 1y]}", "watched: expiry"),
    ("asian", "geometric average", "average_type: arithmetic", "average_type: geometric"),
    ("asian", "average as the strike", "strike_type: fixed\n  strike: 100\n", "strike_type: floating\n"),
]
IN_THE_DEFINITION = [
    ("autocall", "knock-in level of the strike", "< knock_in, at: watched}", "< knock_in * strike, at: watched}"),
    ("autocall", "knock-in at its level", "{ever: performance < knock_in", "{ever: performance <= knock_in"),
    ("autocall", "call above its barrier", "if: performance >= call_barrier", "if: performance > call_barrier"),
    ("autocall", "average of the assets", "performance: worst(spot / initial)", "performance: mean(spot / initial)"),
    ("autocall", "loss below the strike in points", "min(performance / strike - 1, 0)", "min(performance - strike, 0)"),
    ("reverse_convertible", "coupon of each date", "pay: coupon * period", "pay: coupon"),
    ("barrier", "barrier beyond its level", "(spot <= barrier) if direction == 'down' else (spot >= barrier)",
     "(spot < barrier) if direction == 'down' else (spot > barrier)"),
    ("snowball_autocall", "one coupon only", "pay: coupon * nth", "pay: coupon"),
    ("asian", "level at expiry against the strike", "bought: average_price if strike_type == 'fixed' else spot",
     "bought: spot"),
]


def tape_of(dated: DatedContract) -> str:
    return str(unroll(dated, nodes=(0.5, 1.5)).observed)


@pytest.mark.parametrize(("example", "name", "old", "new"), IN_THE_CONTRACT)
def test_a_reading_is_the_contract_written_out(example: str, name: str, old: str, new: str):
    first, *_, market = (EXAMPLES / f"{example}.yaml").read_text().split("---\n")
    assert old in first
    by_hand = dated_of(request_of(f"{first.replace(old, new, 1)}---\n{market}"))
    assert tape_of(reading_of(dated_of(request(example)), name).dated) == tape_of(by_hand)


@pytest.mark.parametrize(("example", "name", "old", "new"), IN_THE_DEFINITION)
def test_a_reading_is_the_definition_written_out(example: str, name: str, old: str, new: str):
    definition = shipped_text(example).split("readings:")[0]
    assert old in definition
    text = (EXAMPLES / f"{example}.yaml").read_text()
    by_hand = dated_of(request_of(f"{definition.replace(old, new, 1)}---\n{text}"))
    assert tape_of(reading_of(dated_of(request(example)), name).dated) == tape_of(by_hand)


def test_a_call_decided_first_leaves_out_the_coupon_of_its_day():
    definition = shipped_text("autocall").split("readings:")[0]
    coupon, call = definition.index("  - at: observations  #"), definition.index("  - at: observations\n")
    end = definition.index("  - at: observations.last")
    turned = definition[:coupon] + definition[call:end] + definition[coupon:call] + definition[end:]
    text = (EXAMPLES / "autocall.yaml").read_text()
    by_hand = dated_of(request_of(f"{turned}---\n{text}"))
    assert tape_of(reading_of(dated_of(request("autocall")), "no coupon on a call").dated) == tape_of(by_hand)


def test_what_the_contract_says_already_is_told_apart():
    _, joint = unrolled("autocall", 0)
    assert {other.reading.name for other in joint.same} == {
        "knock-in all the time", "no memory", "call from the first observation", "average of the assets"}


NOTE = """\
contract: Barrier note
currency: EUR
notional: 1000
assets: [north]
start: 2026-12-01
day_count: 30/360
settlement: 2 business days
calendar: {holidays: none, roll: following}
payoff: barrier_reverse_convertible
terms:
  initial: 100
  strike: 100%
  knock_in: 80%
  watched: final
  coupon: 6%
  coupon_dates: [2027-06-01, 2027-12-01]
  final: 2027-11-29
  maturity: coupon_dates.last
---
market: 2026-12-01
rates: {EUR: 2%}
funding: {EUR: 50 bp}
assets:
  north: {spot: 100, currency: EUR, yield: 1%, vol: 22%}
"""


def valued(text: str, seed: int, paths: int = 1 << 16) -> ReadingsValuation:
    ready = prepare(text)
    return value_readings(ready.dated, ready.market, paths=paths, seed=seed)


def test_a_paired_difference_is_that_of_two_contracts_with_fresh_numbers():
    """The difference of watching all the time, with the error of the pairs, against two prices by themselves."""
    found = next(one for one in valued(NOTE, 11).readings if one.name == "knock-in all the time")
    alone = prepare(NOTE).price(1 << 20, 12)
    other = prepare(NOTE.replace("watched: final", "watched: {continuous: [2026-12-01, final]}")).price(1 << 20, 13)
    error = np.sqrt(found.difference.standard_error**2 + alone.error**2 + other.error**2)
    assert error < 0.02 * abs(found.difference.value)
    assert abs(found.difference.value - (other.mean - alone.mean)) < 4 * error


TWO_SIDES = """\
payoff: two_sides
terms:
  below:  {type: watch}
  above:  {type: watch}
  expiry: {type: date}
running:
  fell: {ever: spot <= 85, at: below}
  rose: {ever: spot >= 115, at: above}
events:
  - at: expiry
    pay: 1 if (fell or rose) else 0
readings:
  - name: both all the time
    about: Both sides are watched continuously.
    terms:
      above: {continuous: [start, expiry]}
  - name: a band
    about: The upper side is a band.
    running:
      rose: {ever: 115 <= spot <= 130, at: above}
    terms: {above: {continuous: [start, expiry]}}
  - name: the other side
    about: The upper side is watched continuously, the lower one at expiry.
    terms:
      below: expiry
      above: {continuous: [start, expiry]}
---
contract: Two sides
currency: EUR
units: 1
assets: [north]
payoff: two_sides
terms:
  below: {continuous: [0y, 1y]}
  above: expiry
  expiry: 1y
---
market: 0y
rates: {EUR: 2%}
assets:
  north: {spot: 100, currency: EUR, yield: 1%, vol: 20%}
"""


def test_watches_are_refused_within_a_reading_and_not_across_readings():
    """One reading watches a band, which is refused; others both sides of an asset, or only the side that the contract
    does not watch: each has its own law beside the contract's."""
    values = valued(TWO_SIDES, 17, 1 << 18)
    assert [one.name for one in values.refused] == ["a band"]
    assert "from both sides at once" in str(values.refused[0].faults[0])
    both, other = values.readings
    turned = TWO_SIDES.replace("  below: {continuous: [0y, 1y]}\n  above: expiry\n",
                               "  below: expiry\n  above: {continuous: [0y, 1y]}\n")
    doubled = TWO_SIDES.replace("  above: expiry\n", "  above: {continuous: [0y, 1y]}\n")
    for found, text in ((values.price, TWO_SIDES), (other.price, turned), (both.price, doubled)):
        alone = prepare(text).price(1 << 18, 18)
        assert abs(found.value - alone.mean) < 4 * np.hypot(found.standard_error, alone.error)
        assert found.standard_error < 5e-3 * found.value


def test_pairs_are_sharper_than_two_runs():
    values = valued(NOTE, 14)
    close = next(one for one in values.readings if one.name == "one business day later")
    assert close.difference.standard_error < 0.2 * np.hypot(close.price.standard_error, values.price.standard_error)
    assert close.difference.value == pytest.approx(close.price.value - values.price.value, abs=1e-12)


def test_a_sure_difference_has_no_error():
    """6 % on each date instead of 30/360 halves: 3 % more on both, discounted with funding by hand."""
    found = next(one for one in valued(NOTE, 15, 1 << 12).readings if one.name == "coupon of each date")
    days = 182, 365  # 2026-12-01 to 2027-06-01 and to 2027-12-01
    assert found.difference.value == pytest.approx(sum(0.03 * np.exp(-0.025 * day / 365) for day in days), rel=1e-12)
    assert found.difference.standard_error < 1e-15


def test_a_reading_that_no_path_tells_apart_says_so():
    told = {one.name: one.differs for one in valued(NOTE, 16, 1 << 12).readings}
    assert not told["knock-in at its level"] and told["knock-in at each close"]


def test_a_difference_meets_its_closed_form_and_its_intervals_cover():
    """A put knocked in below 80, watched at expiry, read as watched all the time: Merton (1973), Reiner and Rubinstein
    (1991). Over 400 seeds the 95 % intervals of the difference cover it about 95 % of the time."""
    market = {"spot": 100.0, "maturity": 1.0, "rate": 0.04, "dividend_yield": 0.01, "vol": 0.24}
    at_expiry = slice_of_payoff(-1.0, 100.0, 0.0, 80.0, **market)
    truth = barrier_option("put", "down", "in", 100.0, 80.0, **market) - at_expiry
    made = request("barrier")
    dated, covered = dated_of(made, 3), 0
    assert dated.contract.title == "Down-and-in put, watched at expiry"
    for seed in range(400):
        (found,) = (one for one in value_readings(dated, made.market, paths=2048, seed=7000 + seed).readings
                    if one.name == "barrier all the time")
        low, high = found.difference.interval95
        covered += low <= truth <= high
    assert 0.92 * 400 <= covered <= 0.98 * 400  # 2.8 deviations of a binomial
    sharp = value_readings(dated, made.market, paths=1 << 20, seed=SEED).readings[0].difference
    assert sharp.standard_error < 5e-3 * truth and abs(sharp.z(truth)) < 4


def test_readings_beside_an_amount_paid_at_a_hit():
    """The dates of other readings cut no moment in two; a watch at each close is that of a contract of its own."""
    text = """contract: up and out
currency: EUR
units: 1
assets: [avocet]
start: 2026-12-01
settlement: 2 business days
calendar: {holidays: ECB, roll: following}
payoff: barrier
terms: {side: call, direction: up, knock: out, strike: 50, barrier: 65, watched: WATCHED, expiry: 2027-06-01,
        rebate_at_hit: 1}
---
market: 2026-12-01
rates: {EUR: 2.0%}
assets:
  avocet: {spot: 52, currency: EUR, yield: 1.5%, vol: 20%}
"""
    made = request_of(text.replace("WATCHED", "{continuous: [2026-12-01, expiry]}"))
    found = value_readings(date_on(made.contracts[0], made.market)[0], made.market, paths=2**16, seed=SEED)
    close = next(each for each in found.readings if each.name == "barrier at each close")
    alone = price_of(text.replace("WATCHED", "{from: 2026-12-02, until: expiry, every: 1 business day}"), 2**16, SEED + 1)
    assert abs(close.price.value - alone.mean) < 4 * np.hypot(close.price.standard_error, alone.error)


TOGETHER = """\
payoff: together
terms:
  watched: {type: watch}
  expiry:  {type: date}
running:
  fell: {ever: any(spot <= 80), at: watched}
  low: {lowest: 'of(spot, north)', at: watched}
let:
  paid: 1 if fell else 0
events:
  - at: expiry
    pay: paid
readings:
  - name: how far one fell
    about: What the first asset fell at most.
    let: {paid: 'max(1 - low / 100, 0)'}
  - name: at its level only
    about: The level itself counts.
    running:
      fell: {ever: any(spot <= 79), at: watched}
---
contract: Two assets
currency: EUR
units: 1
assets: [north, south]
payoff: together
terms: {watched: {continuous: [0y, 1y]}, expiry: 1y}
---
market: 0y
rates: {EUR: 2%}
assets:
  north: {spot: 100, currency: EUR, yield: 1%, vol: 20%}
  south: {spot: 100, currency: EUR, yield: 1%, vol: 20%}
correlation: {north/south: 50%}
"""


def test_readings_without_a_joint_law_are_refused_beside_the_contract():
    """The contract weighs the chances of two assets, one reading draws an extreme of one of them: alone each has a law,
    together the flags would have to be drawn as well, and their joint law is not known. That reading says so, with the
    line; the contract and the other reading keep their laws and are valued."""
    drawn = TOGETHER.replace("paid: 1 if fell else 0", "paid: max(1 - low / 100, 0)")
    assert all(prepare(text).price(1 << 12, 21).mean > 0.0 for text in (TOGETHER, drawn))
    values = valued(TOGETHER, 21, 1 << 12)
    assert [one.name for one in values.refused] == ["how far one fell"]
    assert "their joint law is not known; watch them on dates" in values.refused[0].faults[0].text
    assert values.refused[0].faults[0].place.line == 6
    (other,) = values.readings
    assert other.name == "at its level only" and other.difference.value < 0.0
    alone = prepare(TOGETHER).price(1 << 14, 22)
    assert abs(values.price.value - alone.mean) < 4 * np.hypot(values.price.standard_error, alone.error)
