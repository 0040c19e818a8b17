"""The law of one level at one time that an asset's vols by strike say, and markets at the vols of given strikes.

A put's price at each strike, by Black's formula at that strike's vol, says the whole law of the level: its distribution
is the put's derivative in strike, Black's term plus the vega times the slope of vol in strike (D. Breeden &
R. Litzenberger, "Prices of state-contingent claims implicit in option prices", Journal of Business 51, 1978).
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, replace
from functools import cache

from scipy.special import ndtr

from mcx.checked.contract import Contract
from mcx.checked.market import Market
from mcx.checked.strike_vols import curve_at, shown_strike, strike_of
from mcx.leaves.market_map import MarketMap

STEP = 1e-6  # of a strike, for the slope of vol on one side of it
FLAT_TIME = 1.0  # at which flat vols are looked at


def at_strikes(market: Market, contract: Contract, levels: Mapping[str, float]) -> Market:
    """The market in which assets have the one vol curve of a strike: `levels` as the contract reads them, so in its own
    currency where an asset is converted at the rate of the day. Assets without vols by strike keep their vol."""
    here = MarketMap(market, contract)
    assets = dict(market.assets)
    for name, level in levels.items():
        asset = assets[name]
        if asset.by_strike is not None:
            own = level * asset.spot.value / here.forward(name, 0.0)
            assets[name] = replace(asset, vol=curve_at(asset.by_strike, strike_of(asset, own)))
    return replace(market, assets=assets)


@dataclass(frozen=True, slots=True)
class LevelLaw:
    """The law of a level: `forward`, of which `certain` is cash dividends still to come, and for each strike the total
    variance of the rest."""

    forward: float
    certain: float
    variance: Callable[[float], float]

    def put(self, strike: float, variance: float | None = None) -> float:
        """The undiscounted put at a strike; at another strike's variance where that is given."""
        forward, left = self.forward - self.certain, strike - self.certain
        variance = self.variance(strike) if variance is None else variance
        if left <= 0.0 or variance <= 0.0:
            return max(left - forward, 0.0)
        deviation = math.sqrt(variance)
        d1 = math.log(forward / left) / deviation + 0.5 * deviation
        return float(left * ndtr(deviation - d1) - forward * ndtr(-d1))

    def below(self, strike: float, side: float) -> float:
        """The chance of a level below a strike, with the slope of vol on one side of it (-1 or +1): where strikes are
        given vol has a kink, and so two slopes."""
        left, variance = strike - self.certain, self.variance(strike)
        if left <= 0.0 or variance <= 0.0:
            return float(left > self.forward - self.certain)
        deviation = math.sqrt(variance)
        d2 = math.log((self.forward - self.certain) / left) / deviation - 0.5 * deviation
        step = side * STEP * strike
        by_vol = (self.put(strike, self.variance(strike + step)) - self.put(strike, variance)) / step
        return float(ndtr(-d2)) + by_vol


def laws(market: Market, contract: Contract, here: MarketMap, name: str, smile: bool) -> Callable[[float], LevelLaw]:
    """The law of an asset's level at each time by its vols by strike or, without `smile`, by the one vol that prices
    the contract. `here` is the map of the market, whose forward serves every strike, also at a fixed rate of exchange.
    """
    last, number = here.last, contract.assets.index(name)

    @cache
    def at(strike: float) -> MarketMap:
        return MarketMap(at_strikes(market, contract, {name: strike}), contract, last)

    def law(time: float) -> LevelLaw:
        certain = float(here.escrowed(number, time, last)) if last is not None else 0.0
        return LevelLaw(here.forward(name, time), certain,
                        lambda strike: (at(strike) if smile else here).vol_to(name, time) ** 2 * time)

    return law


def butterflies(market: Market, contract: Contract, here: MarketMap) -> Iterator[str]:
    """Where puts at the strikes given fit no law: three neighbours of which the middle one is worth too much, or a
    spread of two worth less than nothing or more than its width."""
    for name in contract.assets:
        asset = market.assets[name]
        vols = asset.by_strike
        times = {} if vols is None else {node.label: node.time or FLAT_TIME for node in vols.curves[0].nodes}
        law = laws(market, contract, here, name, smile=True)
        unit = here.forward(name, 0.0) / asset.spot.value
        for label, time in times.items():
            if here.last is not None and time > here.last:
                continue
            found = law(time)
            strikes = [(one * asset.spot.value if vols.relative else one) * unit for one in vols.strikes]
            puts = [found.put(strike) for strike in strikes]
            slopes = [(puts[k + 1] - puts[k]) / (strikes[k + 1] - strikes[k]) for k in range(len(puts) - 1)]
            at = f" at {label}" if label else ""
            for k, slope in enumerate(slopes):
                pair = f"{shown_strike(vols, vols.strikes[k])} and {shown_strike(vols, vols.strikes[k + 1])}"
                if not 0.0 <= slope <= 1.0:
                    yield f"the vols of {name}{at} fit no law of its level: a put spread between {pair} says so"
                elif k and slope < slopes[k - 1]:
                    yield (f"the vols of {name}{at} fit no law of its level: a butterfly from "
                           f"{shown_strike(vols, vols.strikes[k - 1])} to {shown_strike(vols, vols.strikes[k + 1])} is "
                           f"worth less than nothing")
