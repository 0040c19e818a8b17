"""What must hold between contracts, whatever the numbers: most of it path by path, on the same draws."""

from __future__ import annotations

from math import exp, sqrt

import numpy as np
import pytest
from closed_forms import european, exchange_of_forwards, gap_option
from helpers import check, document, estimate_of, payments, prepare, price_of
from scipy.integrate import quad

SEED = 0x428A2F98D728AE22
MARKET = """market: 0y
rates: {EUR: {0.5y: 1%, 2y: 3.5%}}
funding: {EUR: 60 bp}
assets:
  harbour: {spot: 100, currency: EUR, yield: {1y: 2%, 3y: 1%}, vol: {0.5y: 24%, 1y: 20%, 2y: 21%}}
  lantern: {spot: 80, currency: EUR, yield: 0%, vol: 33%}
  orchard: {spot: 50, currency: EUR, forwards: {0.5y: 50.6, 1y: 49.2, 2y: 52.5}, vol: 15%}
correlation: {harbour/lantern: 55%, harbour/orchard: -20%, orchard/lantern: 10%}
"""


def one(payoff: str, assets: str = "[harbour]", size: str = "units: 1", **terms: object) -> str:
    return document(payoff, assets=assets, size=size, **terms) + "---\n" + MARKET


@pytest.mark.parametrize("watched", ["{continuous: [0y, 1y]}", "{count: 12, until: 1y}"])
@pytest.mark.parametrize(("side", "direction", "barrier"), [("put", "down", 85), ("call", "up", 118)])
def test_in_and_out_make_the_vanilla(watched: str, side: str, direction: str, barrier: float):
    """On every path knock-in and knock-out together pay what the option without a barrier pays: on dates one of the two
    pays it, watched continuously each its share by the chance of a touch."""
    terms = {"side": side, "direction": direction, "strike": 100, "barrier": barrier, "watched": watched,
             "expiry": "1y"}
    knocked_in = payments(one("barrier", knock="in", **terms), 2048, SEED)["price"]
    knocked_out = payments(one("barrier", knock="out", **terms), 2048, SEED)["price"]
    vanilla = payments(one("barrier", knock="out", **terms | {"barrier": 1e-3 if direction == "down" else 1e6}), 2048,
                       SEED)["price"]
    np.testing.assert_allclose(knocked_in + knocked_out, vanilla, rtol=1e-13)
    assert np.all((knocked_in == 0) | (knocked_out == 0)) is np.bool_("continuous" not in watched)
    assert (knocked_in > 0).any() and (knocked_out > 0).any()


def test_call_less_put_is_the_forward():
    """Put-call parity path by path: what is left over, S - K, has the forward as its mean."""
    call = payments(one("european", side="call", strike=97, expiry="2y"), 2**18, SEED)
    put = payments(one("european", side="put", strike=97, expiry="2y"), 2**18, SEED)
    discount = exp(-(0.035 + 0.006) * 2)
    left = discount * (call["level: harbour"] - 97)
    np.testing.assert_allclose(call["price"] - put["price"], left, rtol=1e-12, atol=1e-12)
    carried = 0.02 + (0.03 - 0.02) / 2  # yield times years at 2 years, halfway from 1 year at 2 % to 3 at 1 %
    check(estimate_of(left), discount * (100 * exp(0.07 - carried) - 97), sharp=2e-2)


FORWARDS = """payoff: levels
about: Pays the level of each asset on each date, as a leg of its own.
terms:
  dates: {type: dates}
events:
"""


def test_every_forward_is_met():
    """Each asset's mean on each date is its forward: yields by curve, by forwards, and none at all."""
    legs = "".join(f"  - at: dates\n    if: nth == {nth}\n    then:\n      - pay: of(spot, {asset})\n"
                   f"        as: {asset} {nth}\n"
                   for nth in (1, 2, 3, 4) for asset in ("harbour", "lantern", "orchard"))
    text = FORWARDS.replace("terms:", "assets: 3\nterms:") + legs + "---\n" + one(
        "levels", "[harbour, lantern, orchard]", dates="{count: 4, until: 2y}")
    ready = prepare(text)
    legs = ready.estimates(2**18, SEED)
    for nth, time in enumerate((0.5, 1.0, 1.5, 2.0), start=1):
        zero = {0.5: 0.01, 1.0: (0.005 + 0.065 / 3) / 1.0, 1.5: (0.005 + 0.13 / 3) / 1.5, 2.0: 0.035}[time] * time
        paid = exp(-zero - 0.006 * time)
        carried = {0.5: 0.01, 1.0: 0.02, 1.5: 0.0225, 2.0: 0.025}[time]
        forwards = {"harbour": 100 * exp(zero - carried), "lantern": 80 * exp(zero),
                    "orchard": {0.5: 50.6, 1.0: 49.2, 1.5: sqrt(49.2 * 52.5), 2.0: 52.5}[time]}
        for asset, forward in forwards.items():
            check(legs[f"leg: {asset} {nth}"], paid * forward, sharp=2e-3)


def test_note_that_is_never_called_is_bond_coupons_and_put():
    """An autocall out of reach, with coupons at any level, is a bond with fixed coupons less a put on the worst."""
    text = one("autocall", size="notional: 1", initial=100, observations="{count: 4, until: 2y}", first_call="0.5y",
               call_barrier="100000%", coupon_barrier="0%", coupon="1.5%", memory="false", knock_in="75%",
               watched="observations.last", strike="100%")
    legs = prepare(text).estimates(2**20, SEED)
    funded = {0.5: 0.01 * 0.5, 1.0: 0.005 + 0.065 / 3, 1.5: 0.005 + 0.13 / 3, 2.0: 0.07}
    factors = {time: exp(-zero - 0.006 * time) for time, zero in funded.items()}
    assert legs["leg: coupon"].mean == pytest.approx(0.015 * sum(factors.values()), rel=1e-12)
    assert legs["leg: redemption"].mean == pytest.approx(factors[2.0], rel=1e-12)
    put = gap_option("put", 75, 100, spot=100, maturity=2.0, rate=0.035, dividend_yield=0.0125, vol=0.21)
    check(legs["leg: capital at risk"], -put / 100 * exp(-0.012), sharp=3e-3)


WORST_CALL = """payoff: worst_call
about: A call on the worst performance.
terms:
  initial: {type: level}
  expiry:  {type: date}
events:
  - at: expiry
    pay: max(worst(spot / initial) - 1, 0)
---
"""


def test_worst_of_one_is_the_single_asset():
    """With one asset the worst is itself, path by path."""
    worst = payments(WORST_CALL + one("worst_call", initial=100, expiry="1y"), 4096, SEED)["price"]
    single = payments(one("european", side="call", strike=100, expiry="1y"), 4096, SEED)["price"]
    np.testing.assert_allclose(worst, single / 100, rtol=1e-13, atol=1e-15)


def test_worst_of_twins_is_the_single_asset():
    """Two perfectly correlated assets with one law are one asset: the factor of a singular matrix is no trouble."""
    twins = ("market: 0y\nrates: {EUR: 2%}\nassets:\n  harbour: {spot: 100, currency: EUR, yield: 0%, vol: 25%}\n"
             "  lantern: {spot: 10, currency: EUR, yield: 0%, vol: 25%}\ncorrelation: {harbour/lantern: 100%}\n")
    text = WORST_CALL + document("worst_call", assets="[harbour, lantern]", initial="{harbour: 100, lantern: 10}",
                                 expiry="1y") + "---\n" + twins
    check(price_of(text, 2**20, SEED), european("call", 1.0, 1.0, 1.0, 0.02, 0.0, 0.25), sharp=3e-3)


CROSSING = """market: 0y
rates: {EUR: 3%}
assets:
  harbour: {spot: 100, currency: EUR, yield: 1%, vol: {0.5y: 10%, 1y: 30%}}
  lantern: {spot: 98, currency: EUR, yield: 2%, vol: {0.5y: 32%, 1y: 24%}}
correlation: {harbour/lantern: 90%}
"""


@pytest.mark.parametrize("dates", ["1y", "0.3y and 1y"])
def test_exchange_under_vols_that_cross(dates: str):
    """Margrabe (1978) with the covariance integrated over time. The vols move in opposite directions, so that the
    product of the two deviations overstates the covariance by far, and with it the value would be wrong."""
    vol_a = lambda t: 0.10 if t < 0.5 else sqrt((0.30**2 - 0.10**2 * 0.5) / 0.5)  # noqa: E731
    vol_b = lambda t: 0.32 if t < 0.5 else sqrt((0.24**2 - 0.32**2 * 0.5) / 0.5)  # noqa: E731
    covariance = 0.9 * quad(lambda t: vol_a(t) * vol_b(t), 0.0, 1.0, points=[0.5], epsabs=1e-14)[0]
    receive, give = 100 * exp(-0.01), 98 * exp(-0.02)
    truth = exchange_of_forwards(receive, give, sqrt(0.30**2 + 0.24**2 - 2 * covariance))
    naive = exchange_of_forwards(receive, give, sqrt(0.30**2 + 0.24**2 - 2 * 0.9 * 0.30 * 0.24))
    terms = {"receive": "harbour", "give": "lantern", "receive_units": 1, "give_units": 1, "expiry": "1y"}
    text = document("exchange_option", assets="[harbour, lantern]", **terms) + "---\n" + CROSSING
    if dates != "1y":  # one more date that is read: two steps instead of one
        text = SEEN_EARLIER + document("seen_earlier", assets="[harbour, lantern]", look="0.3y", expiry="1y") + \
            "---\n" + CROSSING
    estimate = price_of(text, 2**20, SEED)
    check(estimate, truth, sharp=3e-3)
    assert abs(estimate.mean - naive) > 50 * estimate.error


SEEN_EARLIER = """payoff: seen_earlier
about: An exchange of two assets, and a look at both on the way that all but always finds them positive.
assets: 2
terms:
  look:   {type: date}
  expiry: {type: date}
running:
  seen: {ever: worst(spot) > 0.001, at: look}
events:
  - at: expiry
    if: seen
    then:
      - pay: max(of(spot, harbour) - of(spot, lantern), 0)
---
"""

FIXED_SUM = """payoff: fixed_sum
about: Pays one on the payment date of the expiry.
terms:
  expiry: {type: date}
  later:  {type: date}
events:
  - at: expiry
    pay: 1
    as: after the lag
  - at: expiry
    pay: 1
    as: on a stated day
    due: later
  - at: expiry
    pay: 1
    as: same day
    due: same day
---
"""


def test_amounts_are_discounted_from_the_day_they_are_paid():
    """An amount is discounted, funding included, from its payment date: after the settlement lag over a weekend,
    on a stated day, or on the day itself."""
    text = FIXED_SUM + """contract: lag
currency: EUR
units: 1
assets: [harbour]
start: 2026-12-01
day_count: Actual/365 (Fixed)
settlement: 3 business days
calendar: {holidays: none, roll: following}
payoff: fixed_sum
terms:
  expiry: 2027-12-02
  later: 2028-03-01
---
market: 2026-12-01
rates: {EUR: 4%}
funding: {EUR: 100 bp}
assets:
  harbour: {spot: 100, currency: EUR, yield: 0%, vol: 20%}
"""
    legs = prepare(text).estimates(64, SEED)
    days = {"after the lag": 371, "on a stated day": 456, "same day": 366}  # Thursday to Tuesday: five days later
    for leg, count in days.items():
        assert legs[f"leg: {leg}"].mean == pytest.approx(exp(-0.05 * count / 365), rel=1e-12)
        assert legs[f"leg: {leg}"].error < 1e-15
