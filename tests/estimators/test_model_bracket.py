"""The model bracket against exact values: the law that vols by strike say, by quadrature of its own, never by the
package's strips."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from functools import cache
from math import exp, log, sqrt

import closed_forms as forms
import numpy as np
import pytest
from helpers import request_of
from scipy.stats import norm

from mcx.dates.dating import date_on
from mcx.estimators.batches import Sampling
from mcx.estimators.estimate import Estimate
from mcx.estimators.model_bracket import AtStrike, ModelBracket, model_bracket
from mcx.estimators.ready import Ready, prepare
from mcx.estimators.revalue import Revaluer
from mcx.estimators.verify import Band, beyond, model_band
from mcx.leaves.jacobian import inputs, moved
from mcx.leaves.smile import at_strikes, butterflies

SEED, PATHS = 0x3956C25B59F111F1, 1 << 17
SPOT, RATE, YIELD, YEARS = 100.0, 0.03, 0.02, 1.0
FORWARD, DISCOUNT = SPOT * exp((RATE - YIELD) * YEARS), exp(-RATE * YEARS)
STEP = 5e-4
STRIKES = (50, 70, 90, 110, 130)
SMILES = {
    "flat": (20, 20, 20, 20, 20),
    "linear skew": (32, 28, 24, 20, 16),
    "smile": (30, 24, 20, 19, 21),
    "steep below": (45, 31, 22, 19, 18.5),
}
LOSS = """payoff: loss
about: Par less what the level lacks of the strike, once it is below the knock-in at the end.
terms:
  initial: {type: level}
  strike: {type: percent}
  knock_in: {type: percent}
  expiry: {type: date}
let:
  performance: worst(spot / initial)
events:
  - at: expiry
    pay: 1
  - at: expiry
    name: knocked in
    if: performance < knock_in
    then:
      - pay: min(performance / strike - 1, 0)
---
"""
TITLE = "contract: Case\ncurrency: EUR\n{size}\nassets: {assets}\npayoff: {payoff}\nterms: {terms}\n"


def market(vols: str, more: str = "", correlation: str = "") -> str:
    return (f"---\nmarket: 0y\nrates: {{EUR: {100 * RATE}%}}\nfunding: {{EUR: 0 bp}}\nassets:\n"
            f"  harbour: {{spot: {SPOT}, yield: {100 * YIELD}%, vol: {vols}}}\n{more}{correlation}")


def by_strike(vols: tuple[float, ...], priced_at: str = "100%") -> str:
    each = ", ".join(f"{strike}%: {{6m: {vol}%, 1y: {vol}%}}" for strike, vol in zip(STRIKES, vols, strict=True))
    return f"{{strikes: {{{each}}}, priced_at: {priced_at}}}"


def contract(payoff: str, terms: str, size: str = "notional: 1", assets: str = "[harbour]") -> str:
    return TITLE.format(payoff=payoff, terms=f"{{{terms}}}", size=size, assets=assets)


def loss(strike: str = "100%", knock_in: str = "70%", **where: str) -> str:
    return LOSS + contract("loss", f"initial: 100, strike: {strike}, knock_in: {knock_in}, expiry: 1y", **where)


def ready_of(text: str) -> Ready:
    made = request_of(text)
    dated, faults = date_on(made.contracts[0], made.market)
    assert not faults
    found, faults = prepare(dated, made.market)
    assert not faults
    return found


@cache
def bracket_of(text: str, seed: int = SEED, paths: int = PATHS) -> tuple[ModelBracket, float]:
    """The bracket and the headline price on the same paths."""
    found = ready_of(text)
    sampling = Sampling(seed, paths)
    price = Revaluer.of(found.unrolled.tape, found.dated.contract).price(found.market.market, sampling)[1].value
    return model_bracket(found, found.market.market, sampling), price


def put(strike: np.ndarray, vol: np.ndarray) -> np.ndarray:
    """Black's undiscounted put for one year."""
    d1 = np.log(FORWARD / strike) / vol + vol / 2
    return strike * norm.cdf(vol - d1) - FORWARD * norm.cdf(-d1)


def exact(payoff: Callable[[np.ndarray], np.ndarray], vols: tuple[float, ...] | float) -> float:
    """The discounted mean of a payoff under the law whose puts have these vols at the strikes: chances are differences
    of the puts on a grid, between whose points every break of a payoff lies in the middle."""
    grid = STEP * (np.arange(2_000, 800_000) + 0.5)
    vol = np.interp(grid, STRIKES, np.array(vols) / 100) if isinstance(vols, tuple) else np.full_like(grid, vols / 100)
    chances = np.diff(np.diff(put(grid, vol)) / STEP, prepend=0.0, append=1.0)
    return DISCOUNT * float(chances @ payoff(grid))


def knocked(level: np.ndarray, strike: float = 1.0, knock_in: float = 0.7) -> np.ndarray:
    return 1.0 + np.where(level / 100 < knock_in, np.minimum(level / 100 / strike - 1.0, 0.0), 0.0)


def test_the_quadrature_agrees_with_a_closed_form():
    """What the tests below hold the bracket against, where vol is flat."""
    spread = exact(lambda level: np.maximum(80.0 - level, 0.0), 25.0)
    assert spread == pytest.approx(forms.european("put", SPOT, 80.0, 1.0, RATE, YIELD, 0.25), abs=2e-4)


CAPPED = ("initial: 100, weights: 100%, averaging: [1y], protection: 95%, participation: 100%, strike: 100%, cap: 120%")
DIGITAL = "pays: cash, amount: 1, expiry: 1y"
FLAT = {
    "reverse convertible": loss(),
    "capped": contract("capital_protection", CAPPED),
    "digital at a strike given": contract("digital", f"side: put, strike: 90, {DIGITAL}", size="units: 1"),
    "watched": contract("barrier", "side: put, direction: down, knock: in, strike: 100, barrier: 80, "
                        "watched: {continuous: [0y, 1y]}, rebate: 0, expiry: 1y", size="units: 1"),
    "forward start": contract("forward_start", "side: call, pays: money, strike: 105%, strike_date: 6m, expiry: 1y",
                              size="units: 1"),
}


@pytest.mark.parametrize("text", FLAT.values(), ids=FLAT)
def test_a_flat_smile_has_a_bracket_of_no_width(text):
    """Exactly zero, with every correction in it."""
    found, _ = bracket_of(text + market(by_strike(SMILES["flat"], "90%")))
    assert found.strikes
    assert {(each.value, each.standard_error) for each in found.changes} == {(0.0, 0.0)}


@pytest.mark.parametrize("smile", [name for name in SMILES if name != "flat"])
@pytest.mark.parametrize(("strike", "knock_in"), [("100%", "70%"), ("100%", "60%"), ("90%", "80%"), ("100%", "100%")])
def test_a_reverse_convertible_lies_inside(smile, strike, knock_in):
    """The European strip under the smile is the price with each strike at its own vol, is what the corrected jump says
    within its error, and is inside the bracket."""
    vols = SMILES[smile]
    found, price = bracket_of(loss(strike, knock_in) + market(by_strike(vols)))
    share, level = float(strike[:-1]) / 100, float(knock_in[:-1]) / 100
    headline = exact(lambda at: knocked(at, share, level), (vols[2] + vols[3]) / 2)
    gain = exact(lambda at: knocked(at, share, level), vols) - headline
    assert found.exact
    assert min(found.strip) - 2e-6 <= gain <= max(found.strip) + 2e-6
    assert found.low.value - 1e-6 <= gain <= found.high.value + 1e-6
    here = next(one for one in found.strikes if one.levels == (("harbour", 100 * level),))
    for below_and_above in here.skewed:
        if level * 100 not in STRIKES:  # one slope
            assert abs(below_and_above.value - gain) < 4.0 * below_and_above.standard_error + 1e-5
    assert len(here.skewed) == (0 if level == share else 2)
    assert price == pytest.approx(headline, abs=2e-3)


def test_a_capped_gain_lies_beyond_every_single_vol():
    """It buys one strike and sells another; only with each strike at its own vol is the strip inside."""
    vols = SMILES["linear skew"]
    found, _ = bracket_of(contract("capital_protection", CAPPED) + market(by_strike(vols)))

    def gain(level: np.ndarray) -> np.ndarray:
        return np.clip(level / 100 - 1.0, 0.0, 0.2)

    truth = exact(gain, vols) - exact(gain, 22.0)
    assert truth > max(one.change.value for one in found.strikes) + 1e-3
    assert found.strip == pytest.approx((truth, truth), abs=2e-6)
    assert found.low.value <= truth <= found.high.value + 1e-6


@pytest.mark.parametrize(("side", "strike"), [("put", 83), ("call", 83), ("put", 101), ("call", 118)])
@pytest.mark.parametrize("smile", ["linear skew", "smile"])
def test_a_digital_is_the_derivative_of_the_put_in_strike(side, strike, smile):
    """With the vol going along with the strike: both by the strip and by the corrected jump, and the sign of the
    correction turns with the side."""
    vols = SMILES[smile]
    text = contract("digital", f"side: {side}, strike: {strike}, {DIGITAL}", size="units: 1")
    found, _ = bracket_of(text + market(by_strike(vols)))

    def at(level: float) -> float:
        return float(put(np.array(level), np.interp(level, STRIKES, np.array(vols) / 100)))

    below = (at(strike + 1e-3) - at(strike - 1e-3)) / 2e-3
    vol = np.interp(strike, STRIKES, np.array(vols) / 100)
    headline = (vols[2] + vols[3]) / 200
    one_vol = {name: float(norm.cdf(-(log(FORWARD / strike) - sd * sd / 2) / sd)) for name, sd in
               (("own", vol), ("headline", headline))}
    sign = 1.0 if side == "put" else -1.0
    truth = sign * DISCOUNT * (below - one_vol["headline"])
    assert found.strip == pytest.approx((truth, truth), abs=1e-6)
    (one,) = found.strikes
    correction = sign * DISCOUNT * (below - one_vol["own"])
    assert abs(correction) > 5e-3
    for skewed in one.skewed:
        shift = skewed.value - one.change.value
        assert shift == pytest.approx(correction, rel=0.03)
        assert abs(skewed.value - truth) < 4.0 * skewed.standard_error + 2e-4
    assert len(one.skewed) == 2


def test_where_vols_are_quoted_a_digital_has_two_slopes():
    """At a strike given the slope of vol is another below than above, and both are in the bracket."""
    vols = SMILES["smile"]
    text = contract("digital", f"side: put, strike: 90, {DIGITAL}", size="units: 1")
    found, _ = bracket_of(text + market(by_strike(vols)))

    def at(level: float) -> float:
        return float(put(np.array(level), np.interp(level, STRIKES, np.array(vols) / 100)))

    for number, step in enumerate((-1e-3, 1e-3)):
        slope = DISCOUNT * (at(90.0 + step) - at(90.0)) / step
        headline = DISCOUNT * float(norm.cdf(-(log(FORWARD / 90.0) - 0.195**2 / 2) / 0.195))
        assert found.strip[number] == pytest.approx(slope - headline, abs=1e-5)
    assert found.strip[0] < found.strip[1]
    assert found.strikes[0].skewed[0].value < found.strikes[0].skewed[1].value


PAYMENT = """payoff: payment
about: One formula of the level at the end, and one of it half-way.
terms:
  half: {type: date}
  end: {type: date}
events:
  - at: half
    pay: %s
  - at: end
    pay: %s
---
"""
SHAPES = {
    "airbag": ("min(spot / 80, 1) if spot < 100 else (1 + 0.9 * (spot / 100 - 1))",
               lambda at: np.where(at < 100, np.minimum(at / 80, 1), 1 + 0.9 * (at / 100 - 1))),
    "twin win": ("abs(spot / 100 - 1) if spot > 65 else (spot / 100 - 1)",
                 lambda at: np.where(at > 65, np.abs(at / 100 - 1), at / 100 - 1)),
    "bonus": ("max(spot / 100, 1.12) if spot > 75 else (spot / 100)",
              lambda at: np.where(at > 75, np.maximum(at / 100, 1.12), at / 100)),
    "range": ("1 if spot >= 82 and spot <= 117 else 0", lambda at: 1.0 * ((at >= 82) & (at <= 117))),
    "beyond the strikes given": ("max(45 - spot, 0) + (1 if spot > 140 else 0)",
                                 lambda at: np.maximum(45 - at, 0) + 1.0 * (at > 140)),
}


def payment(end: str, half: str = "0") -> str:
    return PAYMENT % (half, end) + contract("payment", "half: 6m, end: 1y", size="units: 1")


@pytest.mark.parametrize("shape", SHAPES)
def test_the_strip_of_any_broken_line(shape):
    """Lines that jump and turn, up and down, also where vols are flat beyond the strikes given."""
    vols = SMILES["smile"]
    formula, function = SHAPES[shape]
    found, _ = bracket_of(payment(formula) + market(by_strike(vols)), paths=4096)
    truth = exact(function, vols) - exact(function, 19.5)
    assert found.exact
    assert found.strip == pytest.approx((truth, truth), abs=5e-6)


def test_a_range_between_two_strikes_given():
    """Each end has its two slopes of vol, and these need not be taken on the same side."""
    vols = SMILES["smile"]
    found, _ = bracket_of(payment("1 if spot >= 90 and spot <= 110 else 0") + market(by_strike(vols)), paths=4096)

    def chance(level: float, step: float) -> float:
        here, there = (float(put(np.array(at), np.interp(at, STRIKES, np.array(vols) / 100)))
                       for at in (level, level + step))
        return (there - here) / step

    ends = [DISCOUNT * (chance(110.0, up) - chance(90.0, down)) for up in (-1e-4, 1e-4) for down in (-1e-4, 1e-4)]
    headline = exact(lambda at: 1.0 * ((at >= 90) & (at <= 110)), 19.5)
    assert found.strip == pytest.approx((min(ends) - headline, max(ends) - headline), abs=4e-6)
    assert found.exact
    assert found.low.value <= found.strip[0] < found.strip[1] <= found.high.value


@pytest.mark.parametrize(("end", "half"), [
    ("1 if spot < 93 else 0", "log(spot / 100)"),  # a curve without a break
    ("1 if spot < 93 else 0", "(spot / 100) ** 2"),
    ("(((spot - 100) / 10) ** 3) if spot > 90 and spot < 110 else 0", "0"),  # as its chord at both ends and half-way
])
def test_a_curve_is_no_strip(end, half):
    """Puts and digitals do not add up to it, so the price needs more than their vols."""
    assert not bracket_of(payment(end, half) + market(by_strike(SMILES["smile"])), paths=4096)[0].exact


def test_a_line_without_a_break_beside_a_strip():
    """It is worth its forward whatever the vols."""
    vols = by_strike(SMILES["smile"])
    one, other = (bracket_of(payment("1 if spot < 93 else 0", half) + market(vols), paths=4096)[0]
                  for half in ("0", "spot / 50 - 1"))
    assert one.exact and other.exact
    assert one.strip == other.strip


def test_a_term_structure_of_strikes():
    """Between two tenors total variance at each strike is linear in time."""
    vols = "{strikes: {80%: {3m: 34%, 2y: 28%}, 110%: {3m: 19%, 2y: 21%}}, priced_at: spot}"
    text = contract("european", "side: put, strike: 92, expiry: 1y", size="units: 1")
    found, _ = bracket_of(text + market(vols))

    def price(strike: float, at: float) -> float:
        share = (at - 80.0) / 30.0
        short, long = 0.34 + share * (0.19 - 0.34), 0.28 + share * (0.21 - 0.28)
        variance = short**2 * 0.25 + (long**2 * 2 - short**2 * 0.25) * 0.75 / 1.75
        return forms.european("put", SPOT, strike, 1.0, RATE, YIELD, sqrt(variance))

    truth = price(92.0, 92.0) - price(92.0, 100.0)
    assert found.strip == pytest.approx((truth, truth), abs=1e-9)
    (one,) = found.strikes
    assert abs(one.change.value - truth) < 4.0 * one.change.standard_error
    assert one.change.standard_error < 0.02 * abs(truth)


def test_a_level_is_one_of_the_initial_fixing_not_of_the_spot():
    """A note that began at another level: its 70 % is a share of that, in the spot's terms another strike."""
    text = LOSS + contract("loss", "initial: 120, strike: 100%, knock_in: 70%, expiry: 1y")
    found, _ = bracket_of(text + market(by_strike(SMILES["linear skew"])))
    assert [one.levels for one in found.strikes] == [(("harbour", 84.0),), (("harbour", 120.0),)]
    assert [one.vols[0][1] for one in found.strikes] == pytest.approx([0.252, 0.18])


def test_strikes_as_levels_are_the_same_as_shares():
    levels = "{strikes: {50: 32%, 70: 28%, 90: 24%, 110: 20%, 130: 16%}, priced_at: 100}"
    shares = "{strikes: {50%: 32%, 70%: 28%, 90%: 24%, 110%: 20%, 130%: 16%}, priced_at: spot}"
    one, other = (bracket_of(loss() + market(vols))[0] for vols in (levels, shares))
    assert [each.change.value for each in one.strikes] == pytest.approx([each.change.value for each in other.strikes],
                                                                       abs=1e-12)
    assert one.strip == pytest.approx(other.strip, abs=1e-12)


LANTERN = "  lantern: {spot: 50, yield: 1%, vol: %s}\n"


def worst_of(lantern: str, correlation: int = 40) -> str:
    text = LOSS + contract("loss", "initial: {harbour: 100, lantern: 50}, strike: 100%, knock_in: 70%, expiry: 1y",
                           assets="[harbour, lantern]")
    return text + market(by_strike(SMILES["linear skew"]), LANTERN.replace("%s", lantern),
                         f"correlation: {{harbour/lantern: {correlation}%}}\n")


def test_a_worst_of_takes_the_level_of_each_asset():
    """Each asset at the vol of its own level; the price there is that of a market with these two vols."""
    text = worst_of("{strikes: {60%: 30%, 100%: 22%}, priced_at: 100%}")
    found, price = bracket_of(text)
    first = found.strikes[0]
    assert first.levels == (("harbour", 70.0), ("lantern", 35.0))
    assert first.vols == (("harbour", pytest.approx(0.28)), ("lantern", pytest.approx(0.28)))
    plain = LOSS + contract("loss", "initial: {harbour: 100, lantern: 50}, strike: 100%, knock_in: 70%, expiry: 1y",
                            assets="[harbour, lantern]") + market(
        "28%", "  lantern: {spot: 50, yield: 1%, vol: 28%}\n", "correlation: {harbour/lantern: 40%}\n")
    there = ready_of(plain)
    again = Revaluer.of(there.unrolled.tape, there.dated.contract).price(there.market.market, Sampling(SEED, PATHS))[1]
    assert price + first.change.value == pytest.approx(again.value, abs=1e-12)
    assert not found.exact
    assert not found.strip


def test_the_jump_of_a_worst_of_against_the_put_by_hand():
    """The corrected jump is the derivative of a put on the worst, in a strike that takes both vols along."""
    found, _ = bracket_of(worst_of("{strikes: {60%: 30%, 100%: 22%}, priced_at: 100%}"))
    first = found.strikes[0]
    draws = np.random.default_rng(20261201).standard_normal((2, 1 << 21))
    draws[1] = 0.4 * draws[0] + sqrt(1 - 0.16) * draws[1]

    def worst(share: float) -> np.ndarray:
        vols = (0.32 + (share * 100 - 50) / 80 * (0.16 - 0.32), 0.30 + (share * 100 - 60) / 40 * (0.22 - 0.30))
        logs = [(RATE - q) - vol**2 / 2 + vol * z for q, vol, z in zip((0.02, 0.01), vols, draws, strict=True)]
        return np.exp(np.minimum(*logs))

    h = 1e-3
    by_vol = (np.maximum(0.7 - worst(0.7 + h), 0) - np.maximum(0.7 - worst(0.7 - h), 0)) / (2 * h)
    correction = -0.3 * DISCOUNT * by_vol.mean()
    error = 0.3 * DISCOUNT * by_vol.std() / sqrt(by_vol.size)
    for skewed in first.skewed:
        assert abs(skewed.value - first.change.value - correction) < 4.0 * (error + skewed.standard_error)
    assert abs(correction) > 20.0 * error


def test_one_asset_may_have_one_vol():
    """Then it keeps that vol wherever the other's level is."""
    found, _ = bracket_of(worst_of("25%"))
    assert [dict(one.vols)["lantern"] for one in found.strikes] == [0.25, 0.25]


@pytest.mark.parametrize("more", [
    "dividends: [{ex: 0.5y, cash: 2.5}]",
    "currency: USD, quanto: {fx_vol: 9%, fx_correlation: -30%, fx: EUR per USD}",
])
def test_cash_dividends_and_fixed_rates_of_exchange(more):
    """Where the level that decides is the last one observed, both leave a lognormal level: the strip is a put at the
    vol of its strike on the forward of the market."""
    text = TITLE.format(payoff="european", terms="{side: put, strike: 85, expiry: 1y}", size="units: 1",
                        assets="[harbour]")
    if "quanto" in more:
        text = text.replace("assets: [harbour]", "assets: [harbour]\nconversion: {harbour: quanto}")
    vols = by_strike(SMILES["linear skew"])
    quoted = market(vols).replace("yield:", f"{more}, yield:").replace("{EUR: 3.0%}", "{EUR: 3%, USD: 4%}")
    found = ready_of(text + quoted)
    bracket = model_bracket(found, found.market.market, Sampling(SEED, PATHS))
    forward = found.market.forward("harbour", 1.0)
    assert forward != pytest.approx(FORWARD)

    def price(vol: float) -> float:
        d1 = log(forward / 85.0) / vol + vol / 2
        return DISCOUNT * (85.0 * norm.cdf(vol - d1) - forward * norm.cdf(-d1))

    truth = price(0.25) - price(0.22)
    assert bracket.strip == pytest.approx((truth, truth), abs=1e-9)
    assert bracket.exact == ("quanto" not in more)  # how the level goes with the rate under skew is not said
    (one,) = bracket.strikes
    slack = 0.03 * truth if "quanto" in more else 0.0  # its drift hangs on the vol as well
    assert abs(one.change.value - truth) < 4.0 * one.change.standard_error + slack


def test_a_cash_dividend_between_two_observations():
    """What of the level half-way is the dividend still to come is certain; the vol of the strike is that of the rest."""
    text = payment("spot / 100", "max(85 - spot, 0) + (10 if spot < 85 else 0)")
    quoted = market(by_strike(SMILES["linear skew"])).replace("yield: 2.0%", "dividends: [{ex: 0.75y, cash: 8}]")
    found, _ = bracket_of(text + quoted, paths=4096)
    certain = 8.0 * exp(-RATE * 0.25)
    forward = SPOT * exp(RATE * 0.5) - certain

    def price(strike: float, vol: float) -> float:
        deviation = vol * sqrt(0.5)
        left = strike - certain
        d1 = log(forward / left) / deviation + deviation / 2
        return exp(-RATE * 0.5) * (left * norm.cdf(deviation - d1) - forward * norm.cdf(-d1))

    def worth(vol_at: Callable[[float], float]) -> float:
        below = (price(85.01, vol_at(85.01)) - price(84.99, vol_at(84.99))) / 0.02
        return price(85.0, vol_at(85.0)) + 10.0 * below

    truth = worth(lambda at: 0.42 - 0.002 * at) - worth(lambda at: 0.22)
    assert found.strip == pytest.approx((truth, truth), abs=2e-5)


@pytest.mark.parametrize(("gap", "rest", "reach"), [
    (4.0, 2.0, 2.0), (1.5, 0.0, 2.0), (0.25, -0.75, 2.0), (-1.0, -2.0, 0.0)])
def test_what_a_price_between_two_slopes_leaves_of_a_gap(gap, rest, reach):
    """The strip from +1 to +2 about the headline; the price at the vol of one level, +3, is known to be wrong."""
    away = AtStrike((("harbour", 80.0),), (("harbour", 0.3),), False, Estimate(3.0, 0.1, 64), ())
    exactly = ModelBracket((away,), (1.0, 2.0), True, (), 64)
    assert beyond(gap, *exactly.settled) == rest
    for held in (True, False):
        assert model_band(exactly, gap, held) == Band("model bracket", reach, held)
    assert model_band(replace(exactly, exact=False), gap) == Band("model bracket", 3.0 if gap > 0.0 else 0.0,
                                                                  1.0 <= gap <= 3.0)


def test_a_rate_of_exchange_of_the_day():
    """A strike in the contract's currency is one of the asset's own over the rate of exchange of today; the vol of the
    rate is in both prices."""
    text = ("contract: Case\ncurrency: EUR\nunits: 1\nassets: [harbour]\nconversion: {harbour: composite}\n"
            "payoff: european\nterms: {side: put, strike: 76.5, expiry: 1y}\n")
    quoted = market(by_strike(SMILES["linear skew"])).replace("yield:", "currency: USD, yield:").replace(
        "{EUR: 3.0%}", "{EUR: 3%, USD: 4%}").replace("assets:", "fx: {EUR per USD: {spot: 0.9, vol: 10%}}\nassets:")
    quoted += "correlation: {harbour/EUR per USD: -25%}\n"
    found = ready_of(text + quoted)
    bracket = model_bracket(found, found.market.market, Sampling(SEED, PATHS))
    forward = 0.9 * 100 * exp(0.03 - 0.02)

    def price(vol: float) -> float:
        both = sqrt(vol**2 + 0.1**2 - 2 * 0.25 * vol * 0.1)
        d1 = log(forward / 76.5) / both + both / 2
        return DISCOUNT * (76.5 * norm.cdf(both - d1) - forward * norm.cdf(-d1))

    truth = price(0.25) - price(0.22)  # 76.5 is 85 at 0.9
    assert bracket.strip == pytest.approx((truth, truth), abs=1e-9)
    assert not bracket.exact
    (one,) = bracket.strikes
    assert abs(one.change.value - truth) < 4.0 * one.change.standard_error


def test_every_strike_moves_with_a_vol():
    """A parallel shift of the vol that prices the contract takes all strikes along, so the bracket stays about it."""
    found = ready_of(loss() + market(by_strike(SMILES["linear skew"])))
    here, contract_ = found.market.market, found.dated.contract
    vols = [number for number in inputs(here, contract_) if number.kind == "vol"]
    there = moved(here, {number: 0.01 for number in vols})
    for level in (60.0, 70.0, 97.0):
        one, other = (at_strikes(each, contract_, {"harbour": level}).assets["harbour"].vol for each in (here, there))
        assert [b.quoted.value - a.quoted.value for a, b in zip(one.nodes, other.nodes, strict=True)] == pytest.approx(
            [0.01, 0.01])


def test_no_bracket_without_vols_by_strike():
    assert bracket_of(loss() + market("22%"))[0] is None


def test_a_variance_swap_refers_to_no_level():
    text = (
        "payoff: returns\nabout: Squares.\nterms:\n  fixings: {type: dates}\nrunning:\n  squares:\n"
        "    total: log(spot / previous(spot, spot)) ** 2\n    at: fixings\nevents:\n  - at: fixings.last\n"
        "    pay: squares\n---\n" + contract("returns", "fixings: {count: 4, until: 1y}", size="units: 1"))
    found, _ = bracket_of(text + market(by_strike(SMILES["smile"])), paths=4096)
    assert found.strikes == ()
    assert found.low is None
    assert not found.strip


def test_errors_cover_the_truth():
    """Differences on the same paths and corrected jumps: their 95 % intervals cover about 95 %."""
    vols = SMILES["linear skew"]
    text = loss() + market(by_strike(vols))
    truth = exact(knocked, vols) - exact(knocked, 22.0)
    plain = exact(knocked, 28.0) - exact(knocked, 22.0)
    found = ready_of(text)
    seen = [model_bracket(found, found.market.market, Sampling(seed, 4096)).strikes[0] for seed in range(300)]
    for inside in (np.mean([abs(one.change.value - plain) < one.change.half_width for one in seen]),
                   np.mean([abs(one.skewed[0].value - truth) < one.skewed[0].half_width for one in seen])):
        assert 0.90 < inside < 0.985


@pytest.mark.parametrize(("vols", "said"), [
    (SMILES["linear skew"], []),
    ((20, 35, 20, 20, 20), ["a butterfly from 50% of the spot to 90% of the spot"]),
    ((20, 20, 20, 90, 20), ["put spread between 110% of the spot and 130% of the spot"]),
])
def test_butterflies(vols, said):
    """Vols that no law has are named."""
    found = ready_of(loss() + market(by_strike(vols)))
    texts = list(butterflies(found.market.market, found.dated.contract, found.market))
    assert bool(texts) == bool(said)
    for words in said:
        assert any(words in text and "at 1y" in text for text in texts)
