"""From the market document to the tape's leaves."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from leaves.test_curves import HERE, curve
from mcx.checked.contract import Contract, Figures
from mcx.checked.market import AssetMarket, Market, Quoted
from mcx.checked.payoff import Payoff
from mcx.leaves.market_map import MarketMap
from mcx.tape.program import Leaf, LeafKind

PAYOFF = Payoff("made up", "", (), (), (), (), HERE)
TERMS = {"strike": Figures(((1.1,), (1.2,)), HERE, per_date=True), "initial": Figures(((100.0, 50.0),), HERE,
                                                                                     per_asset=True)}
CONTRACT = Contract("trade", "EUR", ("north", "south"), PAYOFF, TERMS, HERE, notional=1.0)
MARKET = Market(
    valuation=None,
    rates={"EUR": curve("zero", {1.0: 0.02, 2.0: 0.03})},
    funding={"EUR": curve("zero", {0.0: 0.01})},
    assets={
        "north": AssetMarket("north", Quoted(100.0, HERE), "EUR", curve("vol", {1.0: 0.1, 2.0: 0.3}), HERE,
                             dividend_yield=curve("zero", {0.0: 0.015})),
        "south": AssetMarket("south", Quoted(50.0, HERE), "", curve("vol", {0.5: 0.4, 2.0: 0.25}), HERE,
                             forwards=curve("forward", {1.5: 53.0})),
    },
    correlation={("south", "north"): Quoted(0.6, HERE)},
    uncertainty={},
    place=HERE,
)
MAP = MarketMap(MARKET, CONTRACT)


def value(kind: LeafKind, **fields) -> float:
    """The value of one leaf."""
    return float(MAP.values([Leaf(kind, **fields)])[0])


def test_forwards_and_discounts():
    """Forwards grow at rate less yield or as given; funding lowers the discount of payments and no forward."""
    assert MAP.forward("north", 2.0) == pytest.approx(100.0 * math.exp(0.06 - 0.03))
    assert MAP.forward("south", 1.5) == pytest.approx(53.0)
    assert MAP.discount(1.0) == pytest.approx(math.exp(-0.02))
    assert MAP.funded_discount(1.0) == value(LeafKind.DISCOUNT, end=1.0) == pytest.approx(math.exp(-0.03))
    assert MAP.vol_to("north", 2.0) == pytest.approx(0.3)


def test_todays_forward_is_the_spot_to_the_last_digit():
    """A level at time 0 is the spot, so that a barrier at the spot is met exactly."""
    assert value(LeafKind.FORWARD, asset=0) == 100.0 and value(LeafKind.FORWARD, asset=1) == 50.0


def test_terms_are_read_by_date_and_by_asset():
    """A term leaf is the contract's number for its date and asset."""
    assert value(LeafKind.TERM, name="strike", index=1) == 1.2
    assert value(LeafKind.TERM, name="initial", asset=1) == 50.0


def test_the_drift_keeps_the_forward():
    """exp(drift + half the variance) over a step is the growth of the forward."""
    step = {"asset": 0, "start": 0.7, "end": 1.8}
    growth = math.exp(value(LeafKind.DRIFT, **step) + 0.5 * value(LeafKind.VARIANCE, **step))
    assert growth == pytest.approx(MAP.forward("north", 1.8) / MAP.forward("north", 0.7))


def test_a_steps_covariance_is_an_integral_where_vols_move_apart():
    """One step over which one vol rises and the other falls: covariance is correlation times the exact integral, not
    correlation times both deviations."""
    leaves = [Leaf(LeafKind.FACTOR, i, j, 0.0, 2.0) for i, j in [(0, 0), (1, 0), (1, 1)]]
    a, b, c = MAP.values(leaves)
    factor = np.array([[a, 0.0], [b, c]])
    north = (0.1, math.sqrt(0.18 - 0.01))  # instantaneous vols to 1y and on to 2y
    south = (0.4, math.sqrt((0.125 - 0.08) / 1.5))  # to 0.5y and on to 2y
    integral = 0.5 * north[0] * south[0] + 0.5 * north[0] * south[1] + 1.0 * north[1] * south[1]
    expected = [[0.18, 0.6 * integral], [0.6 * integral, 0.125]]
    np.testing.assert_allclose(factor @ factor.T, expected, rtol=1e-12)
    assert 0.6 * integral < 0.85 * 0.6 * math.sqrt(0.18 * 0.125)  # the shortcut would be far off


def test_factors_do_not_depend_on_which_of_them_are_asked_for():
    """The factor of the first asset alone is the same as within the whole."""
    whole = MAP.values([Leaf(LeafKind.FACTOR, i, j, 0.0, 1.0) for i, j in [(0, 0), (1, 0), (1, 1)]])
    assert value(LeafKind.FACTOR, asset=0, other=0, start=0.0, end=1.0) == whole[0]
    np.testing.assert_array_equal(
        MAP.values([Leaf(LeafKind.FACTOR, 1, 0, 0.0, 1.0), Leaf(LeafKind.FACTOR, 1, 1, 0.0, 1.0)]), whole[1:])


def test_nodes_are_where_drifts_and_vols_change():
    """Every point of a rate, yield, forward and vol curve of the contract's assets, once; each has one of its own here,
    so that none can be left out unseen. Funding moves no asset, nor does the rate of a currency that none has."""
    assert MAP.nodes() == (0.5, 1.0, 1.5, 2.0)
    north = replace(MARKET.assets["north"], dividend_yield=curve("zero", {0.7: 0.01, 1.4: 0.02}))
    market = replace(
        MARKET,
        rates={"EUR": curve("zero", {0.3: 0.02, 2.5: 0.03}), "USD": curve("zero", {0.9: 0.01, 1.9: 0.02})},
        funding={"EUR": curve("zero", {0.8: 0.01, 1.8: 0.02})},
        assets=MARKET.assets | {"north": north, "spare": replace(north, vol=curve("vol", {0.1: 0.2, 0.2: 0.2}))},
    )
    assert MarketMap(market, CONTRACT).nodes() == (0.3, 0.5, 0.7, 1.0, 1.4, 1.5, 2.0, 2.5)


def test_an_asset_grows_at_the_rate_of_its_own_currency():
    """What is paid is discounted in the contract's currency; the forward of an asset quoted in another one is its own
    market's, and so are the nodes of its drift."""
    north = replace(MARKET.assets["north"], currency="USD")
    market = replace(MARKET, rates=MARKET.rates | {"USD": curve("zero", {0.9: 0.05})},
                     assets=MARKET.assets | {"north": north})
    abroad = MarketMap(market, CONTRACT)
    assert abroad.forward("north", 1.0) == pytest.approx(100.0 * math.exp(0.05 - 0.015))
    assert abroad.discount(1.0) == pytest.approx(math.exp(-0.02))
    assert 0.9 in abroad.nodes()
