"""The model bracket in results: how far a price may lie elsewhere where vols differ by strike."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from mcx.checked.market import Market
from mcx.checked.strike_vols import shown_strike, strike_of
from mcx.estimators.estimate import Estimate
from mcx.estimators.model_bracket import AtStrike, ModelBracket
from mcx.estimators.ready import Ready
from mcx.leaves.market_map import MarketMap
from mcx.report.results import Result
from mcx.tape.ops import Op


@dataclass(frozen=True, slots=True)
class StrikeAsset(Result):
    """A level that the contract refers to, as it reads it and as a strike of the asset's vols ('60% of the spot'), and
    the vol of that strike to the last observation; `strike` is '' where the asset has one vol. `beyond` the strikes
    given, where the vol is that of the nearest one."""

    asset: str
    level: float
    strike: str
    vol: float
    beyond: bool


@dataclass(frozen=True, slots=True)
class StrikePrice(Result):
    """The price at the vol of one level (of each asset). `skewed` holds it with the jump at that level corrected for
    the slope of vol in strike below and above it, empty where the price does not jump there at the last observation.
    `difference_standard_error` is that of the price less the headline price, on the same paths, and likewise for
    `skewed`. `forward_start`: the level is a share of the spot of a later date, shown as one of today's."""

    assets: tuple[StrikeAsset, ...]
    price: float
    difference_standard_error: float
    skewed: tuple[float, ...]
    skewed_standard_errors: tuple[float, ...]
    forward_start: bool


@dataclass(frozen=True, slots=True)
class ModelBracketResult(Result):
    """The model bracket: the third uncertainty, beside sampling and inputs, in the unit of the price.

    lower, upper  the lowest and the highest price at the vols of the levels that the contract refers to; None where it
                  refers to none. The standard errors are those of their differences from the headline price
    headline      the strike whose vols the headline price uses, for each asset, with its vol to the last observation
    strikes       the price at each level
    strip         the price with each payment of one level at the vols of its own strikes: the lowest and the highest by
                  the slopes of vol below and above each strike (where vols are quoted these differ); empty where there
                  is no such payment
    exact         whether these are all payments that differ, of levels in the contract's currency: then `strip` needs
                  no model
    indicative    why the bracket is only indicative; empty where it is not
    headline_outside  whether the headline price is none of these: its vols may be of a strike that is no level of the
                  contract
    paths         of the differences
    """

    lower: float | None
    lower_standard_error: float | None
    upper: float | None
    upper_standard_error: float | None
    headline: tuple[StrikeAsset, ...]
    strikes: tuple[StrikePrice, ...]
    strip: tuple[float, ...]
    exact: bool
    indicative: tuple[str, ...]
    headline_outside: bool
    paths: int


ROUNDING = 1e-9
FORWARD_SKEW = ("returns from one date to another live on forward vol and forward skew, which vols by strike of today "
                "do not say")
EARLY_END = ("whether it ends early hangs on the skew at dates to come, the more the longer it may live; vols by "
             "strike of today do not say that")
ON_THE_WAY = "it looks at levels on the way, and vols by strike say nothing of how levels of two dates go together"
TOGETHER = "how several assets move together under skew is not said by the vols of each"
SEVERAL = ("where it buys one level and sells another the price may lie beyond that of every single vol, and so "
           "outside the bracket")
CONVERTED = ("how {names} under skew with a rate of exchange is not said by vols by strike: each strike at its own "
             "vol keeps the {kept} of the headline")
NO_WIDTH = "every level has the vol of the headline: the bracket has no width, and that is no certainty"
NO_LEVEL = "the price refers to no level that has a vol of its own; the skew may matter to it all the same"


def model_bracket_result(found: ModelBracket | None, ready: Ready, here: MarketMap, price: float
                         ) -> ModelBracketResult | None:
    """The bracket about a price; `here` is the market that it was taken on."""
    if found is None:
        return None
    low, high = found.low, found.high
    spot_levels = {name: here.forward(name, 0.0) for name in here.contract.assets}

    def asset(name: str, level: float, vol: float) -> StrikeAsset:
        vols = here.market.assets[name].by_strike
        if vols is None:
            return StrikeAsset(name, level, "", vol, False)
        strike = strike_of(here.market.assets[name], level * here.market.assets[name].spot.value / spot_levels[name])
        inside = vols.strikes[0] * (1.0 - ROUNDING) <= strike <= vols.strikes[-1] * (1.0 + ROUNDING)
        return StrikeAsset(name, level, shown_strike(vols, strike), vol, not inside)

    def headline(name: str, vol: float) -> StrikeAsset:
        quote = here.market.assets[name]
        if quote.by_strike is None:
            return asset(name, spot_levels[name], vol)
        share = quote.by_strike.priced_at / (1.0 if quote.by_strike.relative else quote.spot.value)
        return asset(name, share * spot_levels[name], vol)

    def at(one: AtStrike) -> StrikePrice:
        vols = dict(one.vols)
        return StrikePrice(tuple(asset(name, level, vols[name]) for name, level in one.levels),
                           price + one.change.value, one.change.standard_error,
                           tuple(price + each.value for each in one.skewed),
                           tuple(each.standard_error for each in one.skewed), one.forward_start)

    def end(estimate: Estimate | None) -> tuple[float | None, float | None]:
        return (None, None) if estimate is None else (price + estimate.value, estimate.standard_error)

    return ModelBracketResult(*end(low), *end(high), tuple(headline(name, vol) for name, vol in found.headline_vols),
                              tuple(map(at, found.strikes)), tuple(price + change for change in found.strip),
                              found.exact, tuple(_indicative(found, ready)), _without_headline(low, high), found.paths)


def _without_headline(low: Estimate | None, high: Estimate | None) -> bool:
    """Whether all prices lie on one side of the headline, which they are differences from, by more than rounding."""
    return low is not None and high is not None and (low.value > ROUNDING or high.value < -ROUNDING)


def _indicative(found: ModelBracket, ready: Ready) -> Iterator[str]:
    """Why vols by strike of today do not settle the price."""
    if not found.changes:
        yield NO_LEVEL
    if any(one.forward_start for one in found.strikes):
        yield FORWARD_SKEW
    if found.exact:
        return
    steps = ready.unrolled.observed.instructions
    read = [step for step in steps if step.op in (Op.LEVEL, Op.LOW, Op.HIGH)]
    if len({one.levels for one in found.strikes}) > 1:
        yield SEVERAL
    yield from _converted(ready)
    if any(output.kind == "end" for output in ready.unrolled.observed.outputs):
        yield EARLY_END
    elif len({step.payload.time for step in read}) > 1 or any(step.op is not Op.LEVEL for step in read):
        yield ON_THE_WAY
    if found.changes and all(change.value == 0.0 for change in found.changes) and not _flat(ready.market.market):
        yield NO_WIDTH
    if len({step.payload.asset for step in read}) > 1:
        yield TOGETHER


def _converted(ready: Ready) -> Iterator[str]:
    """Assets in another currency than the contract's, whose vols by strike are of their own."""
    contract, assets = ready.dated.contract, ready.market.market.assets
    for how, kept in (("quanto", "forward"), ("composite", "vol of the rate and correlation with it")):
        names = [name for name in contract.assets if contract.conversion.get(name) == how and assets[name].by_strike]
        if names:
            goes = "goes" if len(names) == 1 else "go"
            yield CONVERTED.format(names=f"{' and '.join(names)} {goes}", kept=kept)


def _flat(market: Market) -> bool:
    """Whether every vol is the same at each strike."""
    by_strike = [asset.by_strike for asset in market.assets.values() if asset.by_strike is not None]
    return all(len({tuple(node.quoted.value for node in curve.nodes) for curve in vols.curves}) == 1
               for vols in by_strike)
