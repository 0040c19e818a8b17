"""What looks like a slip though it may be meant: by the types of terms and by dates, never by what a payoff is.

The limits are rules of thumb, common practice; what they find is a warning, not a fault.
"""

from __future__ import annotations

from collections.abc import Iterator
from math import log

from mcx.checked.contract import Figures
from mcx.checked.payoff import Term
from mcx.dates.dated_contract import DatedContract, Day
from mcx.leaves.market_map import MarketMap
from mcx.report.settled import Settled, right_sides
from mcx.report.wording import figure

LEVELS = (0.2, 5.0)  # today's level over one of the contract
CLOSE = 0.1  # the spot from a fixing of the same day, as a part of it
TURNED = 0.15  # in logs: a rate of exchange that is this far from the spot and nearer to one over it
LARGEST_PERCENT = 5.0
MONTH = 31.0 / 365.0  # years that a watch may end before it is read
LONGEST = 30.0  # years to the last date


def implausible(dated: DatedContract, market: MarketMap | None) -> Iterator[str]:
    """Sentences about what a reader should look at again; levels are compared where there is a market."""
    yield from dated.warnings
    for term in dated.contract.payoff.terms:
        value = dated.contract.terms.get(term.name)
        if isinstance(value, Figures):
            yield from _percent(term, value)
            yield from _levels(term, value, dated, market) if market else ()
    if market:
        yield from _todays_fixings(dated, market)
        yield from _turned_rates(dated, market)
    yield from _watches(dated)
    if dated.last.time > LONGEST:
        yield (f"the last date is {dated.last}, in {dated.last.time:.0f} years (common practice: up to 30): is that "
               f"meant?")


def _percent(term: Term, value: Figures) -> Iterator[str]:
    largest = max(number for row in value.rows for number in row)
    if term.type == "percent" and largest > LARGEST_PERCENT:
        yield f"'{term.name}' is {figure(largest, 'percent')} (common practice: up to 500 %): is that meant?"


def _levels(term: Term, value: Figures, dated: DatedContract, market: MarketMap) -> Iterator[str]:
    """Levels far from today's; a level of 1 makes a performance the level itself and is none of them."""
    if term.type != "level":
        return
    scale = dated.history.scale or (1.0,) * len(dated.contract.assets)  # as adjusted since the start
    for number, asset in enumerate(dated.contract.assets):
        today = market.forward(asset, 0.0) * scale[number]
        for row in value.rows:
            level = row[number if value.per_asset else 0]
            if level > 0.0 and level != 1.0 and not LEVELS[0] <= today / level <= LEVELS[1]:
                yield (f"'{term.name}' is {figure(level)} and {asset} stands at {figure(today)}, {today / level:.3g} "
                       f"times that (common practice: 0.2 to 5 times): do both mean the same level?")
                break


def _todays_fixings(dated: DatedContract, market: MarketMap) -> Iterator[str]:
    """Fixings of the valuation date that are far from the spot of the same day, levels as they count."""
    history = dated.history
    scale = history.scale or (1.0,) * len(dated.contract.assets)
    for number, asset in enumerate(dated.contract.assets):
        fixed, today = history.levels.get((number, history.valuation)), market.forward(asset, 0.0) * scale[number]
        if fixed is not None and abs(today / fixed - 1.0) > CLOSE:
            yield (f"{asset} was fixed at {fixed:.6g} on {history.valuation}, the valuation date, and stands at "
                   f"{today:.6g}, {today / fixed:.3g} times that (common practice: within 10 %): do both mean the "
                   "same level?")


def _turned_rates(dated: DatedContract, market: MarketMap) -> Iterator[str]:
    """Fixings of a rate of exchange that look like the rate the other way round."""
    for rate in market.rates_of_exchange:
        spot = rate.spot.value
        for date, fixed in sorted(dated.history.published.get(rate.name, {}).items()):
            if date <= dated.history.valuation and abs(log(fixed * spot)) < abs(log(fixed / spot)) > TURNED:
                yield (f"{rate.name} was fixed at {figure(fixed)} on {date} and stands at {figure(spot)}: is the "
                       "fixing the rate the other way round?")
                break


def _watches(dated: DatedContract) -> Iterator[str]:
    """Watches that end long before the last date that reads them."""
    settled = Settled(dated.contract)
    for running in settled.running:
        end = _watched_to(running.name, dated)
        last = end and _last_read(running.name, dated, settled)
        if last and last.time > end.time + MONTH:
            yield (f"'{running.name}' is watched until {end} and read until {last} (common practice: at most a month "
                   f"apart): is nothing watched between the two?")


def _watched_to(name: str, dated: DatedContract) -> Day | None:
    """The last day of a running value's watch, None where it has none."""
    terms = dated.contract.payoff.terms
    watched = {term.name for term in terms if term.type == "watch"}
    days = [watch.end for watch in dated.watches if watch.running.name == name]
    days += [moment.day for moment in dated.moments for update in moment.updates
             if update.running.name == name and getattr(update.running.at, "name", "") in watched]
    return max(days, key=lambda day: day.time, default=None)


def _last_read(name: str, dated: DatedContract, settled: Settled) -> Day | None:
    """The last day on which an event reads a running value."""
    readers = []
    for event in dated.contract.payoff.events:
        decides = event.condition if settled.side(event) is None else None
        rights = (right for action in settled.actions(event) for right in right_sides(action))
        if name in settled.names(decides, *rights):
            readers.append(event)
    days = [moment.day for moment in dated.moments for each in moment.events
            if any(each.event is reader for reader in readers)]
    return max(days, key=lambda day: day.time, default=None)
