"""Theta: the same contract, market document and paths, one calendar day on.

The document is kept as it is: levels stand, and every curve is read at the time that is then left; only the ex dates of
dividends come a day nearer, with the contract's dates. A fixing in between
happens at today's level, a payment in between is counted in undiscounted. The tape is the contract's own, with all its
times a day nearer, so nothing is drawn anew.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import replace

from mcx.checked.market import Market
from mcx.dates.dated_contract import DatedContract, Moment
from mcx.estimators.batches import Batches, Sampling
from mcx.estimators.ready import Ready
from mcx.estimators.revalue import Revaluer
from mcx.tape.state import State
from mcx.tape.unroll import unroll

DAY = 1.0 / 365.0
SAME_TIME = 1e-9


def theta(ready: Ready, market: Market, sampled: Callable[[Ready], Sampling], base: Batches) -> Batches:
    """The price one calendar day on less the price today, in the price's unit, as a single quantity; `sampled` says how
    paths are drawn on a contract's steps, `base` is the price today on the same paths.

    Watched stretches are split where the curves bend on either day, so that the bridges of both are exact; then the
    price today is taken on that grid as well.
    """
    contract, sampling = ready.dated.contract, sampled(ready)
    pairs = sampling.each == 2
    if ready.dated.watches:
        nodes = ready.market.nodes()
        ready = replace(ready, unrolled=unroll(ready.dated, nodes=sorted({*nodes, *map(_a_day_later, nodes)}),
                                               makeup=ready.market.makeup(ready.apart), pieces=ready.pieces))
        sampling = sampled(ready)
        base, _ = Revaluer.of(ready.unrolled.tape, contract, pairs=pairs).price(market, sampling)
    later = Revaluer.of(ready.unrolled.tape, contract, later=DAY, pairs=pairs)
    return later.price(_nearer(market), sampling)[0].less(base)


def _a_day_later(time: float) -> float:
    """Of a calendar day the time of the next one, to the last bit: else a step of no length would stand beside it."""
    day = time / DAY
    return (round(day) + 1) / 365.0 if abs(day - round(day)) < 1e-6 else time + DAY


def _nearer(market: Market) -> Market:
    """The market with ex dates a day nearer: they are days of the calendar, as the contract's are."""
    assets = {name: replace(asset, dividends=tuple(replace(each, time=each.time - DAY) for each in asset.dividends),
                            blend=asset.blend and replace(asset.blend, cash_until=asset.blend.cash_until - DAY,
                                                          share_from=asset.blend.share_from - DAY))
              for name, asset in market.assets.items()}
    return replace(market, assets=assets)


def between(dated: DatedContract, state: State) -> Iterator[str]:
    """What happens after the valuation date and up to one calendar day on, in words."""
    moments = [moment for moment in dated.moments if moment.day.time > 0.0] if state.ended is None else []
    for moment in moments:
        if SAME_TIME < moment.day.time <= DAY + SAME_TIME:
            yield f"theta: {_names(moment)} on {moment.day} lies in between and is taken at today's levels"
    due = {each.due: each.pay for each in state.payments if each.amount}
    due |= {day: pay for moment in moments for event in moment.events for pay, day in event.due.items()}
    for day, pay in due.items():
        if SAME_TIME < day.time <= DAY + SAME_TIME:
            yield f"theta: the payment '{pay.leg}' on {day} lies in between and is counted in"


def _names(moment: Moment) -> str:
    found = [f"'{update.running.name}'" for update in moment.updates]
    found += [f"'{event.event.name}'" if event.event.name else "a payment's date" for event in moment.events]
    return ", ".join(dict.fromkeys(found))
