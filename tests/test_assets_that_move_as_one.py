"""Assets that are perfectly correlated and grow and scatter alike: watched together they are one bridge."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from helpers import Ready, document, prepare
from test_watching import ALWAYS, COUNTED

import mcx

SEED = 0x1F83D9ABFB41BD6B
CURVES = "yield: {6m: 1%, 1y: 2.5%}, vol: {3m: 30%, 6m: 25%, 1y: 22%}, dividends: [{ex: 0.4y, share: 1.5%}]"
MARKET = f"""---
market: 0y
rates: {{EUR: {{4m: 4%, 9m: 3%, 1y: 5%}}}}
funding: {{EUR: {{1y: 0.7%}}}}
assets:
  harbour: {{spot: 100, currency: EUR, {CURVES}}}
  lantern: {{spot: 40, currency: EUR, {CURVES}}}
  quarry:  {{spot: 60, currency: EUR, yield: 1%, vol: 18%}}
correlation: {{harbour/lantern: 100%, harbour/quarry: 30%, lantern/quarry: 30%}}
"""
EACH = COUNTED.replace("{type: level}", "{type: level, per: assets}")
QUOTED = EACH.replace("touched: {ever: any(spot <= lower) or any(spot >= upper), at: watched}",
                      "touched: {ever: 'any(spot <= lower) or any(spot >= upper)', at: watched}")
FIRST = QUOTED.replace("any(spot <= lower)", "of(spot <= lower, harbour)").replace(
    "any(spot >= upper)", "of(spot >= upper, harbour)")


def watched(payoff: str, lower: tuple[float, ...], upper: tuple[float, ...], market: str = MARKET) -> Ready:
    """A no-touch of the assets, in the market's order, each with levels of its own."""
    names = ("harbour", "lantern", "quarry")[: len(lower)]
    levels = [dict(zip(names, side, strict=True)) for side in (lower, upper)]
    low, high = (f"{{{', '.join(f'{name}: {level}' for name, level in side.items())}}}" for side in levels)
    text = document("counted", assets=f"[{', '.join(names)}]", lower=low, upper=high, watched=ALWAYS,
                    dates="{count: 4, until: 1y}", expiry="1y")
    return prepare(payoff + text + market)


@pytest.mark.parametrize(("lower", "upper", "one"), [
    ((80, 30), (1e9, 1e9), (80, 1e9)),     # the nearer barrier below is harbour's
    ((80, 34), (1e9, 1e9), (85, 1e9)),     # it is lantern's
    ((80, 34), (130, 60), (85, 130)),      # below it is one's, above the other's
    ((1e-9, 1e-9), (140, 50), (1e-9, 125)),
])
def test_two_are_one_to_the_last_digits(lower: tuple, upper: tuple, one: tuple):
    """Rates, yields, vols and a dividend that change in time: on each path two assets survive as the first alone does
    between the nearer barriers, and nothing is left between bounds."""
    both, first = watched(EACH, lower, upper), watched(FIRST, (one[0], 1.0), (one[1], 1.0))
    assert not both.unrolled.bracketed and {note.law for note in both.unrolled.watches} == {"exact"}
    assert both.unrolled.joined == {0, 1} and not first.unrolled.joined and "gap: price" not in both.names
    values, wanted = (ready.by_path(2**12, SEED)["price"] for ready in (both, first))
    assert values == pytest.approx(wanted, rel=1e-11, abs=1e-13) and 0.05 < values.std()


@pytest.mark.parametrize(("old", "new"), [
    ("harbour/lantern: 100%", "harbour/lantern: 99.9%"),
    ("spot: 40, currency: EUR, yield: {6m: 1%,", "spot: 40, currency: EUR, yield: {6m: 1.01%,"),
    ("1y: 22%}, dividends: [{ex: 0.4y, share: 1.5%}]}\n  q", "1y: 22.1%}, dividends: [{ex: 0.4y, share: 1.5%}]}\n  q"),
    ("share: 1.5%}]}\n  quarry", "share: 1.6%}]}\n  quarry"),
    ("share: 1.5%}]}\n  quarry", "cash: 1}]}\n  quarry"),
    ("spot: 40, currency: EUR, yield: {6m: 1%, 1y: 2.5%}, vol: {3m: 30%, 6m: 25%, 1y: 22%}",
     "spot: 40, currency: EUR, yield: {6m: 1%, 1y: 2.5%}, vol: {strikes: {80%: {3m: 31%, 6m: 26%, 1y: 23%}, "
     "100%: {3m: 30%, 6m: 25%, 1y: 22%}}, priced_at: 100%}"),
])
def test_what_differs_is_between_bounds(old: str, new: str):
    """Not quite perfect correlation, another growth or another vol: the law is known between bounds only, and the one
    of assets that move as one lies between them or close by."""
    assert MARKET.count(old) == 1
    nearly, both = (watched(EACH, (80, 34), (1e9, 1e9), market) for market in (MARKET.replace(old, new), MARKET))
    assert nearly.unrolled.bracketed and {note.law for note in nearly.unrolled.watches} == {"bracketed"}
    assert not nearly.unrolled.joined
    found, wanted = nearly.estimates(2**12, SEED), both.price(2**12, SEED)
    half = found["gap: price"].mean / 2
    assert half > 1e-4 and abs(found["price"].mean - wanted.mean) < half + 4 * wanted.error


def test_a_third_asset_beside_two_that_are_one():
    """The bounds of three, of which two are one, are those of two: on each path the same."""
    three = watched(EACH, (80, 34, 48), (1e9, 1e9, 1e9))
    pair = QUOTED.replace("any(spot <= lower)", "of(spot <= lower, harbour) or of(spot <= lower, quarry)")
    two = watched(pair.replace("any(spot >= upper)", "of(spot >= upper, quarry)"), (85, 1.0, 48), (1e9, 1e9, 1e9))
    assert three.unrolled.bracketed and two.unrolled.bracketed
    values, wanted = three.by_path(2**11, SEED), two.by_path(2**11, SEED)
    for output in ("price", "gap: price"):
        assert values[output] == pytest.approx(wanted[output], rel=1e-10, abs=1e-12) and values[output].std() > 0.0


NOTE = """contract: worst of two that move as one
currency: EUR
notional: 500000
assets: ASSETS
start: 2026-12-01
day_count: 30/360
settlement: 5 business days
calendar: {holidays: ECB, roll: modified following}
payoff: barrier_reverse_convertible
terms:
  initial: INITIAL
  strike: 100%
  knock_in: 65%
  watched: {continuous: [2026-12-01, final]}
  coupon: 7.5%
  coupon_dates: {from: 2027-03-01, until: 2027-12-01, every: 3 months}
  final: 2027-11-24
  maturity: coupon_dates.last
---
market: 2026-12-01
rates: {EUR: {1m: 2.0%, 1y: 2.1%}}
funding: {EUR: 80 bp}
assets:
  harbour: {spot: 4180.2, currency: EUR, yield: 2.4%, vol: {3m: 27%, 1y: 28%}}
  lantern: {spot: 50, currency: EUR, yield: 2.4%, vol: {3m: 27%, 1y: 28%}}
correlation: {harbour/lantern: 100%}
"""


def note(tmp_path: Path, assets: str, initial: str, more: str = "") -> Path:
    case = tmp_path / f"{len(assets)}.yaml"
    case.write_text(NOTE.replace("ASSETS", assets).replace("INITIAL", initial) + more)
    return case


def test_a_note_on_two_is_that_on_the_worse(tmp_path: Path):
    """A funded note with dates on two assets that move as one, priced without bounds: as on the one that stands lower,
    and so are its delta, rate and yield; what a vol alone would do is not said, since it would part the two."""
    both = note(tmp_path, "[harbour, lantern]", "{harbour: 4180.2, lantern: 55}")
    one = note(tmp_path, "[lantern]", "{lantern: 55}")
    prices = [mcx.price(case, paths=2**16) for case in (both, one)]
    assert prices[0].bracket is None
    assert abs(prices[0].price - prices[1].price) < 4 * np.hypot(*(each.standard_error for each in prices)) < 5e-3
    assert [watch.law for watch in mcx.readback(both).watches] == ["exact"]
    found, wanted = ({(line.name, line.asset, line.tenor): line for line in mcx.greeks(case, paths=2**16).greeks
                      if line.asset != "harbour"}
                     for case in (both, one))
    assert {key for key in wanted if key[0] not in ("vega", "gamma")} == set(found) and len(found) >= 6
    for key, line in found.items():
        error = np.hypot(line.standard_error, wanted[key].standard_error)
        assert abs(line.value - wanted[key].value) <= 4 * error, key
    assert abs(found["delta", "lantern", ""].value) > 50 * found["delta", "lantern", ""].standard_error
    refused = {(line.name, line.asset): line.reason for line in mcx.greeks(both, paths=2**12).refused}
    assert all("would part them" in refused["vega", asset] for asset in ("harbour", "lantern"))


QUOTE = """---
quote: Saltmarsh dealing desk
at: 2026-12-01 16:40 CET
side: bid
unit: percent of notional
price: 97.69%
bid_offer: 50 bp
accrual: dirty
commitment: indicative
fees: 10 bp
issue_price: 100%
tolerance: 25 bp
"""


def test_a_quote_is_met_on_markets_that_part_them(tmp_path: Path):
    """`verify` moves vols and correlations one by one, so there the two are told apart: the price is the
    middle of its bounds, a little off the exact one on the same paths."""
    case = note(tmp_path, "[harbour, lantern]", "{harbour: 4180.2, lantern: 55}",
                "uncertainty: {vol: 1%, yield: 0.2%, correlation: 5%, funding: 10 bp, rates: 5 bp}\n" + QUOTE)
    found, exact = mcx.verify(case, paths=2**12), mcx.price(case, paths=2**12)
    assert 1e-6 < abs(found.price - exact.price) < 2 * exact.standard_error


def test_a_vol_moved_alone_is_refused_wherever_it_is_asked_for(tmp_path: Path):
    """The chances of assets that are watched as one hold for no market in which only one of their vols has moved: a
    revaluation does not show it and a grid refuses it, while one that takes both along is that of the worse alone."""
    both = note(tmp_path, "[harbour, lantern]", "{harbour: 4180.2, lantern: 55}")
    one = note(tmp_path, "[lantern]", "{lantern: 55}")
    asked = {"paths": 2**13, "vol_moves": ["0%", "5%"]}
    found = mcx.greeks(both, bump="1%", **asked)
    revalued = {line.name for line in found.comparison}
    assert "vega" not in revalued and "yield" in revalued
    assert sum("would part them" in warning for warning in found.warnings) == 4
    still, part = mcx.greeks(both, assets="lantern", **asked).grid
    assert still.price == found.price and np.isnan(part.price) and "would part them" in part.refused
    wanted, point = mcx.greeks(one, **asked).grid[1], found.grid[1]
    error = np.hypot(point.change_standard_error, wanted.change_standard_error)
    assert point.change < -20 * error and abs(point.change - wanted.change) < 4 * error
