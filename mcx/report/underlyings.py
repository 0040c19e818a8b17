"""What is taken for granted of each underlying: its dividends and how it counts in the contract's currency, in
sentences to print with any value."""

from __future__ import annotations

from collections.abc import Iterator

from mcx.checked.market import AssetMarket
from mcx.dates.dated_contract import DatedContract
from mcx.leaves.market_map import MarketMap
from mcx.report.given_path import day_of
from mcx.report.wording import figure

ESCROWED = ("cash dividends of {name} are escrowed: those with ex dates up to the last observation, {last}, are worth "
            "{worth} today and are taken out of its spot of {spot}; its vol is that of what is left")


def underlyings(dated: DatedContract, market: MarketMap) -> Iterator[str]:
    """Sentences about every asset of a contract, in its order."""
    for number, asset in enumerate(market.quotes):
        yield from _given_up(asset)
        worth = asset.spot.value - market.stripped(number)
        if worth > 0.0:
            yield ESCROWED.format(name=asset.name, last=day_of(market.last, dated), worth=f"{worth:.6g}",
                                  spot=figure(asset.spot.value))
        yield from _converted(asset, market)


def _given_up(asset: AssetMarket) -> Iterator[str]:
    """What the level of an asset loses as time goes by, where it is not a plain yield or forwards."""
    name, decrement = asset.name, asset.decrement
    if asset.total_return and decrement is None:
        yield f"{name} is a total-return index: its level keeps all dividends"
    elif decrement is not None and decrement.points:
        yield (f"{name} gives up {figure(decrement.quoted.value)} points a year, taken as a cash dividend of a 365th "
               "of that on every calendar day")
    elif decrement is not None:
        yield f"{name} gives up {figure(decrement.quoted.value, 'percent')} a year, taken as a continuous yield"
    gone = [each for each in asset.dividends if each.time <= 0.0]
    if gone:
        dividends = "dividends" if len(gone) > 1 else "dividend"
        yield (f"the spot of {name} is without its {dividends} up to the valuation date, the last on "
               f"{gone[-1].label}")
    if asset.blend is not None:
        yield (f"cash dividends of {name} turn into shares of its level over the time that its blend states, each by "
               "the forward just before it, so that forwards stay as they are with cash")


def _converted(asset: AssetMarket, market: MarketMap) -> Iterator[str]:
    """How an asset in another currency counts."""
    own, paid = asset.currency, market.contract.currency
    how = market.contract.conversion.get(asset.name)
    if how == "quanto":
        stated = figure(asset.quanto.fx_correlation.value, "percent")
        yield (f"{asset.name} is quoted in {own} and paid in {paid} at a fixed rate (quanto): its drift holds the "
               f"correlation of {stated} with {' per '.join(asset.quanto.per)} and the vols of both")
    elif how == "composite":
        rate = market.market.fx_between(own, paid)
        yield (f"{asset.name} is quoted in {own} and converted to {paid} at the rate of each date (composite), which "
               f"is simulated too, from {figure(rate.spot.value)} {rate.name}")
