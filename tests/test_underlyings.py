"""Dividends, decrements, quanto and composite assets against closed forms, also where vols move.

A closed form takes the forward and the total variance of what is lognormal; both are worked out here by hand from the
piecewise constant vols and rates of the case.
"""

from __future__ import annotations

from math import exp, expm1, inf, log, sqrt
from pathlib import Path

import numpy as np
import pytest
from closed_forms import exchange_of_forwards, slice_of_payoff
from helpers import Estimate, check, document, prepare, request_of
from scipy.integrate import quad
from scipy.special import ndtr

from mcx.checked.conversions import simulated_rates
from mcx.checked.market import Market
import mcx
from mcx.dates.dating import date_contract
from mcx.estimators.ready import prepare as ready_to_price
from mcx.leaves.market_map import MarketMap
from mcx.tape.program import Leaf, LeafKind

PATHS, SEED = 2**22, 0x428A2F98D728AE22
RATE = 0.04


def market(asset: str, more: str = "", rates: str = "{EUR: 4%, USD: 2%}", currency: str = "EUR") -> str:
    """A textbook market of one asset, and further lines."""
    return f"---\nmarket: 0y\nrates: {rates}\nassets:\n  harbour: {{spot: 100, currency: {currency}, {asset}}}\n{more}"


def option(asset: str, more: str = "", expiry: str = "1y", strike: float = 100, side: str = "call",
           **others: str) -> str:
    """A European option under a market."""
    contract = document("european", side=side, strike=strike, expiry=expiry)
    head, _, terms = contract.partition("payoff: ")
    return head + others.pop("contract", "") + "payoff: " + terms + market(asset, more, **others)


def priced(text: str, paths: int = PATHS) -> Estimate:
    return prepare(text).price(paths, SEED)


def black(forward: float, strike: float, variance: float, time: float = 1.0, rate: float = RATE) -> float:
    """A call. Black (1976), The pricing of commodity contracts."""
    return exp(-rate * time) * exchange_of_forwards(forward, strike, sqrt(variance))


TWO = "dividends: [{ex: 0.25y, cash: 2}, {ex: 0.75y, cash: 3}], vol: 20%"


def stripped(*dividends: tuple[float, float], growth: float = RATE) -> float:
    """The spot of 100 without dividends by ex date and amount."""
    return 100 - sum(cash * exp(-growth * when) for when, cash in dividends)


def test_european_with_escrowed_dividends():
    """Black-Scholes with the spot less today's value of the dividends until expiry; the vol is that of what is left."""
    check(priced(option(TWO)), black(stripped((0.25, 2), (0.75, 3)) * exp(RATE), 100, 0.04))


def test_dividends_after_the_last_observation_have_no_effect():
    """Not one digit changes."""
    later = TWO.replace("cash: 3}]", "cash: 3}, {ex: 1.25y, cash: 7}]")
    assert priced(option(later), 2**10) == priced(option(TWO), 2**10)
    on_the_day = TWO.replace("cash: 3}]", "cash: 3}, {ex: 1y, cash: 7}]")
    check(priced(option(on_the_day, strike=90)),
          black(stripped((0.25, 2), (0.75, 3), (1, 7)) * exp(RATE), 90, 0.04))


@pytest.mark.parametrize("paid", ["cash: 7", "share: 4%"])
def test_the_spot_of_an_ex_date_is_without_its_dividend(paid: str):
    """A dividend of the valuation date or earlier changes no digit; one of the day after does."""
    text = ("contract: c\ncurrency: EUR\nunits: 1\nassets: [harbour]\nstart: 2026-11-02\nsettlement: 0 business days\n"
            "calendar: {holidays: none, roll: following}\npayoff: european\n"
            "terms: {side: call, strike: 100, expiry: 2027-12-01}\n---\nmarket: 2026-12-01\nrates: {EUR: 4%}\n"
            f"assets: {{harbour: {{spot: 100, currency: EUR, vol: 20%, dividends: [{{ex: EX, {paid}}}, "
            "{ex: 2027-05-03, cash: 2}]}}\n")
    gone = [priced(text.replace("EX", ex), 2**10).mean for ex in ("2026-11-16", "2026-12-01", "2026-12-02")]
    assert gone[0] == gone[1] > gone[2] + 1.0


def test_a_date_on_which_no_level_is_read_is_no_observation():
    """A fixed amount paid later does not make later dividends count."""
    text = """
payoff: with_fixed_end
about: A call, and a fixed amount long after it.
terms: {expiry: {type: date}, later: {type: date}}
events:
  - at: expiry
    pay: max(spot - 100, 0)
    as: call
  - {at: later, pay: 1, as: fixed}
---
contract: fixed end
currency: EUR
units: 1
assets: [harbour]
payoff: with_fixed_end
terms: {expiry: 1y, later: LATER}
""" + market(TWO.replace("cash: 3}]", "cash: 3}, {ex: 1.25y, cash: 7}]"))
    near, far = (prepare(text.replace("LATER", later)).estimates(2**10, SEED)["leg: call"] for later in ("1y", "2y"))
    assert near == far


@pytest.mark.parametrize(("asset", "forward"), [
    ("dividends: [{ex: 0.5y, share: 3%}], vol: 20%", 100 * 0.97 * exp(RATE)),
    ("yield: 1%, dividends: [{ex: 0.5y, share: 3%}, {ex: 0.75y, share: 1%}], vol: 20%", 100 * 0.97 * 0.99 * exp(0.03)),
    ("underlying: total return, vol: 20%", 100 * exp(RATE)),
    ("underlying: total return, decrement: 5%, vol: 20%", 100 * exp(RATE - 0.05)),
], ids=["share", "yield and shares", "total return", "percent decrement"])
def test_european_on_a_lognormal_level(asset: str, forward: float):
    """Shares, yields and percent decrements leave the level lognormal."""
    check(priced(option(asset)), black(forward, 100, 0.04))


def test_a_level_between_two_cash_dividends():
    """On a date with a dividend still to come the level is the lognormal part plus that dividend's value: a digital
    looks at the one less the other. On the ex date the dividend has gone."""
    asset, left = TWO, stripped((0.25, 2), (0.75, 3))
    for expiry, escrowed in ((0.25, 3 * exp(-RATE * 0.5)), (0.5, 3 * exp(-RATE * 0.25)), (0.75, 0.0)):
        text = f"""
payoff: looks_twice
about: Looks early and late, so that the dividends of both dates are escrowed.
terms: {{early: {{type: date}}, late: {{type: date}}}}
events:
  - at: early
    if: spot >= 98
    then:
      - {{pay: 1, as: early}}
  - {{at: late, pay: spot, as: late}}
---
contract: twice
currency: EUR
units: 1
assets: [harbour]
payoff: looks_twice
terms: {{early: {expiry}y, late: 1y}}
""" + market(asset)
        found = prepare(text).estimates(PATHS, SEED)
        check(found["leg: early"], slice_of_payoff(0, 1, 98 - escrowed, inf, left, expiry, RATE, 0.0, 0.2))
        check(found["leg: late"], left)


def test_cash_and_share_on_one_day():
    """The share is taken first, then the cash: the forward says so whatever is escrowed."""
    made = MarketMap(*_asked(option("dividends: [{ex: 0.5y, cash: 2, share: 3%}, {ex: 0.8y, cash: 1}], vol: 20%")), 1.0)
    at_ex = 100 * exp(0.5 * RATE) * 0.97 - 2
    assert made.forward("harbour", 0.5) == pytest.approx(at_ex, rel=1e-14)
    assert made.forward("harbour", 0.4999999) == pytest.approx(100 * exp(0.5 * RATE), rel=1e-6)
    assert made.forward("harbour", 1.0) == pytest.approx((at_ex * exp(0.3 * RATE) - 1) * exp(0.2 * RATE), rel=1e-14)
    assert made.forward("harbour", 0.0) == 100.0


def _asked(text: str) -> tuple[Market, object]:
    made = request_of(text)
    return made.market, made.contracts[0]


def test_a_blend_keeps_the_forwards():
    """Cash that becomes a share moves no forward, at any date; wholly a share, the option is Black's at it."""
    asset = "dividends: [{ex: 0.5y, cash: 2}, {ex: 1.5y, cash: 3}, {ex: 2.5y, cash: 4}], vol: 20%"
    blended = asset + ", dividend_blend: {cash_until: 1y, share_from: 2y}"
    plain, mixed = (MarketMap(*_asked(option(each, expiry="3y")), 3.0) for each in (asset, blended))
    for time in (0.4, 0.5, 1.0, 1.5, 2.0, 2.5, 3.0):
        assert mixed.forward("harbour", time) == pytest.approx(plain.forward("harbour", time), rel=1e-13)
    share = 1.5 / (plain.forward("harbour", 1.5) + 3)  # half of the second dividend, over the forward just before it
    assert mixed.escrowed(0, 1.0, 3.0) == pytest.approx(1.5 * exp(-0.5 * RATE) / (1 - share), rel=1e-13)
    shares = asset + ", dividend_blend: {cash_until: 0.1y, share_from: 0.2y}"
    check(priced(option(shares, expiry="3y")), black(plain.forward("harbour", 3.0), 100, 0.12, 3.0))


def test_a_decrement_in_points():
    """Daily cash dividends of a 365th: the forward by the daily recursion, the option by the escrowed closed form."""
    asset = "underlying: total return, decrement: 5 points, vol: 20%"
    level = 100.0
    for _ in range(365):
        level = level * exp(RATE / 365) - 5 / 365
    made = MarketMap(*_asked(option(asset)), 1.0)
    assert made.forward("harbour", 1.0) == pytest.approx(level, rel=1e-12)
    assert made.stripped(0) == pytest.approx(level * exp(-RATE), rel=1e-12)
    check(priced(option(asset)), black(level, 100, 0.04))


def test_dividends_worth_the_spot_are_an_error():
    """At the asset, with both numbers; a blend that would take more than all of the level does not hide it."""
    for more in ("", ", dividend_blend: {cash_until: 0.1y, share_from: 0.2y}"):
        asset = "dividends: [{ex: 0.25y, cash: 60}, {ex: 0.75y, cash: 50}], vol: 20%"
        made = MarketMap(*_asked(option(asset + more)), 1.0)
        (fault,) = made.faults()
        assert "cash dividends of 'harbour'" in fault.text and "its spot is 100" in fault.text


# Rates of exchange whose vols move against the asset's.
ASSET_VOL = "{0.5y: 30%, 1y: 25%}"  # then sqrt((0.0625 - 0.045) / 0.5)
FX_VOL = "{0.25y: 6%, 1y: 12%}"
LATER_VOL = sqrt((0.25**2 - 0.5 * 0.3**2) / 0.5)
LATER_FX = sqrt((0.12**2 - 0.25 * 0.06**2) / 0.75)
TOGETHER = 0.25 * 0.3 * 0.06 + 0.25 * 0.3 * LATER_FX + 0.5 * LATER_VOL * LATER_FX  # the integral of both vols


@pytest.mark.parametrize(("fx", "sign"), [("EUR per USD", 1), ("USD per EUR", -1)])
def test_quanto(fx: str, sign: int):
    """Black's formula at the forward in the asset's currency times exp(-correlation times the integral of both vols),
    the rate of exchange as units of payment currency for one of the asset's. Reiner (1992), Quanto mechanics."""
    asset = f"yield: 1%, vol: {ASSET_VOL}, quanto: {{fx_vol: {FX_VOL}, fx_correlation: 40%, fx: {fx}}}"
    text = option(asset, contract="conversion: {harbour: quanto}\n", currency="USD")
    forward = 100 * exp(0.02 - 0.01 - sign * 0.4 * TOGETHER)
    check(priced(text), black(forward, 100, 0.0625))
    assert MarketMap(*_asked(text)).forward("harbour", 1.0) == pytest.approx(forward, rel=1e-14)


def test_quanto_with_cash_dividends():
    """The lognormal part drifts under the payment currency's measure, dividends are valued under the asset's own."""
    asset = "dividends: [{ex: 0.5y, cash: 3}], vol: 20%, quanto: {fx_vol: 10%, fx_correlation: 50%, fx: EUR per USD}"
    text = option(asset, contract="conversion: {harbour: quanto}\n", currency="USD")
    check(priced(text), black(stripped((0.5, 3), growth=0.02) * exp(0.02 - 0.01), 100, 0.04))


def test_quanto_on_stated_forwards():
    """Forwards say the growth in the asset's currency, so that the market needs no rates of it."""
    asset = "forwards: {1y: 103}, vol: 20%, quanto: {fx_vol: 10%, fx_correlation: -50%, fx: EUR per USD}"
    text = option(asset, contract="conversion: {harbour: quanto}\n", currency="USD", rates="{EUR: 4%}")
    check(priced(text), black(103 * exp(0.5 * 0.2 * 0.1), 100, 0.04))


def test_only_composite_assets_have_a_rate_of_exchange_that_is_simulated():
    """A quanto needs none, even where the market states one; the contract's two assets share theirs."""
    asset = f"yield: 1%, vol: {ASSET_VOL}, quanto: {{fx_vol: 9%, fx_correlation: 40%, fx: EUR per USD}}"
    asked, _ = _asked(option(asset, exchange("EUR per USD", 0.9, 40), currency="USD"))
    assert simulated_rates({"harbour": "quanto"}, "EUR", asked) == []
    assert simulated_rates({"harbour": "composite"}, "EUR", asked) == ["EUR per USD"]


def test_a_composite_asset_on_forwards_needs_rates_of_its_currency(tmp_path: Path):
    """The forward of the rate of exchange hangs on them, whatever the asset's own forwards say."""
    text = option("forwards: {1y: 103}, vol: 20%", exchange("EUR per USD", 0.9, 40), rates="{EUR: 4%}",
                  contract="conversion: {harbour: composite}\n", currency="USD")
    (tmp_path / "case.yaml").write_text(text)
    with pytest.raises(mcx.InputError) as caught:
        mcx.price(tmp_path / "case.yaml")
    assert "the market has no rates for 'USD', the currency of 'harbour'" in str(caught.value.faults[0])


def exchange(name: str, spot: float, correlation: int) -> str:
    """The market's lines of a rate of exchange."""
    return f"fx: {{{name}: {{spot: {spot!r}, vol: {FX_VOL}}}}}\ncorrelation: {{harbour/{name}: {correlation}%}}\n"


@pytest.mark.parametrize(("name", "spot", "correlation"), [("EUR per USD", 0.9, 40), ("USD per EUR", 1 / 0.9, -40)])
def test_composite(name: str, spot: float, correlation: int):
    """The level in the contract's currency is lognormal: its forward grows at the contract's rate less the yield, its
    variance is that of both. The direction of the quotation changes nothing."""
    text = option(f"yield: 1%, vol: {ASSET_VOL}", exchange(name, spot, correlation), strike=90,
                  contract="conversion: {harbour: composite}\n", currency="USD")
    forward, variance = 90 * exp(0.04 - 0.01), 0.0625 + 0.12**2 + 2 * 0.4 * TOGETHER
    check(priced(text), black(forward, 90, variance))
    made = MarketMap(*_asked(text))
    assert made.forward("harbour", 1.0) == pytest.approx(forward, rel=1e-14)
    assert made.vol_to("harbour", 1.0) == pytest.approx(sqrt(variance), rel=1e-14)


def test_composite_with_cash_dividends():
    """Looked at while a dividend is to come, the level is the lognormal part plus its value, times the rate of
    exchange: a digital by quadrature over the rate."""
    text = f"""
payoff: looks_twice
about: Looks early and late.
terms: {{early: {{type: date}}, late: {{type: date}}}}
events:
  - at: early
    if: spot >= 90
    then:
      - {{pay: 1, as: early}}
  - {{at: late, pay: spot, as: late}}
---
contract: twice
currency: EUR
units: 1
assets: [harbour]
conversion: {{harbour: composite}}
payoff: looks_twice
terms: {{early: 0.5y, late: 1y}}
{market("dividends: [{ex: 0.75y, cash: 8}], vol: 25%", exchange("EUR per USD", 0.9, 40), currency="USD")}"""
    growth, left = 0.02, stripped((0.75, 8), growth=0.02)
    fx_variance = 0.25 * 0.06**2 + 0.25 * LATER_FX**2
    joint = 0.4 * 0.25 * (0.25 * 0.06 + 0.25 * LATER_FX)
    rho = joint / sqrt(0.25**2 * 0.5 * fx_variance)
    escrowed = 8 * exp(-0.25 * growth)

    def above(z: float) -> float:
        rate = 0.9 * exp((RATE - growth) * 0.5 - fx_variance / 2 + sqrt(fx_variance) * z)
        mean = log(left) + growth * 0.5 - joint - 0.25**2 * 0.25 + rho * 0.25 * sqrt(0.5) * z
        reached = log(90 / rate - escrowed)
        return exp(-z * z / 2) / sqrt(2 * np.pi) * ndtr((mean - reached) / (0.25 * sqrt(0.5 * (1 - rho**2))))

    found = prepare(text).estimates(PATHS, SEED)
    check(found["leg: early"], exp(-RATE * 0.5) * quad(above, -9, 9, epsabs=1e-12)[0])
    check(found["leg: late"], exp(-RATE) * left * exp(growth) * 0.9 * exp(RATE - growth))


def test_composite_beside_another_asset():
    """An option to exchange two assets, one converted: the covariance of the logs holds that with the rate of exchange
    too. Margrabe (1978)."""
    text = document("exchange_option", assets="[harbour, lantern]", receive="harbour", give="lantern", receive_units=1,
                    give_units=1, expiry="1y").replace("payoff:", "conversion: {harbour: composite}\npayoff:")
    text += market("yield: 1%, vol: 25%", "  lantern: {spot: 92, currency: EUR, yield: 2%, vol: 20%}\n"
                   "fx: {EUR per USD: {spot: 0.9, vol: 12%}}\n"
                   "correlation: {harbour/lantern: 60%, harbour/EUR per USD: 40%, lantern/EUR per USD: -30%}\n",
                   currency="USD")
    both = 0.25**2 + 0.12**2 + 2 * 0.4 * 0.25 * 0.12
    across = 0.6 * 0.25 * 0.2 - 0.3 * 0.12 * 0.2
    deviation = sqrt(both + 0.2**2 - 2 * across)
    check(priced(text), exchange_of_forwards(90 * exp(-0.01), 92 * exp(-0.02), deviation))


def no_touch(asset: str, barrier: float, more: str = "", **others: str) -> str:
    """A no-touch watched all the time for a year, paying 1 at the end."""
    contract = document("touch", kind="no touch", direction="down", barrier=barrier, cash=1,
                        watched="{continuous: [0y, expiry]}", expiry="1y")
    head, _, terms = contract.partition("payoff: touch\n")
    return head + others.pop("contract", "") + "payoff: touch\n" + terms + market(asset, more, **others)


def untouched(start: float, end: float | None, time: float, vol: float, drift: float) -> float:
    """Density at `end` (or, without one, the chance) that a Brownian motion from `start` > 0 has stayed above 0."""
    deviation, mean = vol * sqrt(time), start + drift * time
    image = exp(-2 * start * drift / vol**2)
    if end is None:
        return ndtr(mean / deviation) - image * ndtr((drift * time - start) / deviation)
    density = exp(-((end - mean) / deviation) ** 2 / 2) / (deviation * sqrt(2 * np.pi))
    return density * -expm1(-2 * start * end / deviation**2)


def test_a_share_dividend_inside_a_watched_stretch():
    """The level falls through the barrier on the ex date alone: chance of no touch before times that after, by
    quadrature over the level just before."""
    barrier, fall, drift = log(100 / 90), log(1 / 0.92), RATE - 0.02

    def survives(x: float) -> float:
        return untouched(barrier, x, 0.5, 0.2, drift) * untouched(x - fall, None, 0.5, 0.2, drift)

    exact = exp(-RATE) * quad(survives, fall, 3, epsabs=1e-12, limit=200)[0]
    check(priced(no_touch("dividends: [{ex: 0.5y, share: 8%}], vol: 20%", 90)), exact, sharp=3e-3)


def test_dividends_to_come_at_their_mean_over_a_step():
    """Halfway between their value at both ends, before the ex date at the end of a step and after it at its start."""
    made = MarketMap(*_asked(option(TWO)), 1.0)
    steps = [(0.0, 0.2), (0.2, 0.25), (0.25, 0.4), (0.7, 0.75), (0.75, 0.8)]

    def worth(time: float, late: bool) -> float:
        return sum(cash * exp(-RATE * (ex - time)) for ex, cash in ((0.25, 2), (0.75, 3)) if ex > time - 1e-12 * late)

    found = made.values([Leaf(LeafKind.MEAN_ESCROW, 0, start=start, end=end, last=1.0) for start, end in steps])
    means = [(worth(start, False) + worth(end, True)) / 2 for start, end in steps]
    assert list(found) == pytest.approx(means, rel=1e-14)


def test_a_dividend_on_the_last_day_of_the_watch():
    """Both ends of the stretch belong to it, so the level after the dividend counts."""
    barrier, fall, drift = log(100 / 90), log(1 / 0.92), RATE - 0.02
    exact = exp(-RATE) * quad(lambda x: untouched(barrier, x, 1.0, 0.2, drift), fall, 4, epsabs=1e-12, limit=200)[0]
    check(priced(no_touch("dividends: [{ex: 1y, share: 8%}], vol: 20%", 90)), exact, sharp=3e-3)


@pytest.mark.parametrize(("ex", "cash", "barrier"), [
    (0.5, 8.0, 90.0), (0.532, 8.0, 90.0), (1.0, 15.0, 80.0)])  # between two months as well, and on the last day
def test_a_cash_dividend_moves_the_level_that_is_watched(ex: float, cash: float, barrier: float):
    """Against a fine grid on which the lognormal part is watched at the barrier less the dividend's value, in 250 steps
    a year with the crossing law of each (the barrier nearly straight in a step)."""
    found = priced(no_touch(f"dividends: [{{ex: {ex}y, cash: {cash}}}], vol: 20%", barrier))
    rng = np.random.default_rng(7)
    steps, paths = 250, 2**17
    dt, left = 1 / steps, stripped((ex, cash))
    x, alive = np.full(paths, log(left)), np.ones(paths)
    for k in range(steps):
        start, end = k * dt, (k + 1) * dt
        worth = [cash * exp(-RATE * (ex - t)) if start < ex - 1e-9 else 0.0 for t in (start, end)]
        edges = [log(barrier - each) for each in worth]
        after = x + (RATE - 0.02) * dt + 0.2 * sqrt(dt) * rng.standard_normal(paths)
        gaps = np.maximum(x - edges[0], 0.0), np.maximum(after - edges[1], 0.0)
        alive *= -np.expm1(-2 * gaps[0] * gaps[1] / (0.04 * dt))
        x = after
        if abs(end - ex) < 1e-9:
            alive *= np.exp(x) > barrier  # ex the dividend
    values = exp(-RATE) * alive
    error = sqrt(found.error**2 + values.var() / paths)
    assert error < 5e-3 * found.mean
    assert abs(found.mean - values.mean()) < 4 * error


def test_composite_watched_all_the_time():
    """The converted level is one lognormal, so its no-touch is that of one asset with the vol of both."""
    text = no_touch("yield: 1%, vol: 25%", 80, "fx: {EUR per USD: {spot: 0.9, vol: 12%}}\n"
                    "correlation: {harbour/EUR per USD: 40%}\n", contract="conversion: {harbour: composite}\n",
                    currency="USD")
    vol = sqrt(0.25**2 + 0.12**2 + 2 * 0.4 * 0.25 * 0.12)
    check(priced(text), exp(-RATE) * untouched(log(90 / 80), None, 1.0, vol, RATE - 0.01 - vol**2 / 2), sharp=4e-3)


def test_a_quanto_watched_all_the_time_under_a_vol_of_the_rate_that_moves():
    """Its drift changes where the vol of the rate of exchange does, and the watch is split there: by quadrature over
    the level at that time."""
    asset = "yield: 1%, vol: 20%, quanto: {fx_vol: {0.25y: 6%, 1y: 36%}, fx_correlation: 80%, fx: EUR per USD}"
    text = no_touch(asset, 92, contract="conversion: {harbour: quanto}\n", currency="USD")
    later = sqrt((0.36**2 - 0.25 * 0.06**2) / 0.75)
    first, second = (0.02 - 0.01 - 0.8 * 0.2 * each - 0.02 for each in (0.06, later))
    start = log(100 / 92)
    chance = quad(lambda x: untouched(start, x, 0.25, 0.2, first) * untouched(x, None, 0.75, 0.2, second), 0, 2,
                  epsabs=1e-12, limit=200)[0]
    check(priced(text), exp(-RATE) * chance, sharp=3e-3)


def test_what_cannot_be_watched_is_refused():
    """A converted asset with cash dividends has no known law between two dates: refused at the watch."""
    text = no_touch("dividends: [{ex: 0.5y, cash: 8}], vol: 25%", 80, "fx: {EUR per USD: {spot: 0.9, vol: 12%}}\n"
                    "correlation: {harbour/EUR per USD: 40%}\n", contract="conversion: {harbour: composite}\n",
                    currency="USD")
    asked = request_of(text)
    dated, _ = date_contract(asked.contracts[0], None)
    made, faults = ready_to_price(dated, asked.market)
    assert made is None
    assert ["its law between two dates is not known" in fault.text for fault in faults] == [True]


def test_funding_is_a_spread_curve_that_moves_no_forward():
    """Payments are discounted at the zero rate plus the spread to their date, each its own; forwards stay."""
    text = option("yield: 1%, vol: 20%") + "funding: {EUR: {6m: 50 bp, 2y: 110 bp}}\n"
    spread = (0.5 * 0.005 + 0.5 * (2 * 0.011 - 0.5 * 0.005) / 1.5)  # the log is linear between the points
    check(priced(text), exp(-spread) * black(100 * exp(0.03), 100, 0.04))
    assert MarketMap(*_asked(text)).forward("harbour", 1.0) == pytest.approx(100 * exp(0.03), rel=1e-14)


def test_every_simulated_level_has_its_forward_for_mean():
    """Of all kinds of underlying at once, with correlations between all: the martingale test of each."""
    corner = Path(__file__).parent / "corners" / "underlyings.yaml"
    everything, *watched = mcx.price(corner, paths=2**18, seed=SEED).prices
    tests = [test for result in (everything, *watched) for test in result.checks.martingale]
    assert len(everything.checks.martingale) == 6 and len(tests) == 11
    assert all(abs(test.z) < 4 and test.standard_error < 3e-3 for test in tests)
