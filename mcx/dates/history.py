"""The past of a contract: the levels that were fixed, as they count in it, and what it states beside them.

A fixing counts as the market document says it, times the adjustments of its asset up to its date, converted at the
fixing of the rate of exchange of the same date where the asset is composite. A disrupted day's observation takes the
level of another date, or the level that the contract states. What is simulated starts from today's spot and so counts
times all adjustments up to the valuation date.
"""

from __future__ import annotations

import datetime
import math
from collections.abc import Mapping
from dataclasses import dataclass, field

from mcx.checked.contract import Contract, Known
from mcx.checked.market import Market
from mcx.dates.day import Day
from mcx.faults import Fault, Place


@dataclass(frozen=True, slots=True)
class History:
    """What is known on the valuation date, assets by their numbers in the contract.

    `levels` are levels as they count, of the valuation date and before; `moved` the day whose level counts for an
    observation of a disrupted day; `scale` the factor on simulated levels (empty: none has one); `names` what a level
    needs of the market (the asset, and its rate of exchange); `sound` is whether all fixings could be read;
    `place` where they stand or would stand.
    """

    levels: Mapping[tuple[int, datetime.date], float] = field(default_factory=dict)
    moved: Mapping[tuple[int, datetime.date], Day] = field(default_factory=dict)
    scale: tuple[float, ...] = ()
    names: tuple[tuple[str, ...], ...] = ()
    stated: Mapping[str, Mapping[datetime.date, Known]] = field(default_factory=dict)
    published: Mapping[str, Mapping[datetime.date, float]] = field(default_factory=dict)
    valuation: datetime.date | None = None
    eve: datetime.date | None = None  # the good business day before the valuation date
    sound: bool = True
    place: Place | None = None

    def observed(self, asset: int, day: Day) -> Day:
        """The day whose level counts for an observation."""
        return self.moved.get((asset, day.date), day)

    def level(self, asset: int, day: Day) -> float | None:
        """The level of an asset on a day as it counts; None where it is not fixed."""
        return self.levels.get((asset, day.date))

    def missing(self, asset: int, date: datetime.date) -> list[str]:
        """What of the market has no fixing on a date: the asset, its rate of exchange."""
        names = self.names[asset] if self.names else ()
        return [name for name in names if date not in self.published.get(name, {})]

    def extremes(self, asset: int, start: Day, end: Day) -> tuple[float, float] | None:
        """The lowest and the highest fixing of an asset from one day to another, both included; None without any."""
        found = [level for (number, date), level in self.levels.items()
                 if number == asset and start.date <= date <= end.date]
        return (min(found), max(found)) if found else None


NO_HISTORY = History()


def history_of(contract: Contract, market: Market | None) -> tuple[History, list[Fault]]:
    """The past of a contract on a market, and what is wrong with it."""
    if market is None or market.valuation is None or contract.textbook:
        return NO_HISTORY, []
    today = market.valuation
    faults = _not_past(contract, today)
    levels: dict[tuple[int, datetime.date], float] = {}
    names = []
    for number, asset in enumerate(contract.assets):
        rate = None
        if contract.conversion.get(asset) == "composite" and asset in market.assets:
            rate = market.fx_between(market.assets[asset].currency, contract.currency)
        names.append((asset, rate.name) if rate else (asset,))
        for date, level in market.fixings.get(asset, {}).items():
            exchange = 1.0
            if rate is not None:
                exchange = market.fixings.get(rate.name, {}).get(date, math.nan)
                exchange = exchange if rate.per[0] == contract.currency else 1.0 / exchange
            if date <= today and not math.isnan(exchange):
                levels[number, date] = level * exchange * _factor(contract, asset, date)
    moved = {}
    for asset, dates in contract.disruption.items():
        number = contract.assets.index(asset)
        for date, known in dates.items():
            if isinstance(known.value, datetime.date):
                moved[number, date] = Day((known.value - today).days / 365, known.value)
            elif date <= today:
                levels[number, date] = known.value
    scale = tuple(_factor(contract, asset, today) for asset in contract.assets)
    return History(levels, moved, scale if set(scale) != {1.0} else (), tuple(names), contract.happened,
                   market.fixings, today, sound=market.fixings_sound, place=market.fixings_place), faults


def _factor(contract: Contract, asset: str, date: datetime.date) -> float:
    """The product of an asset's adjustments up to a date."""
    return math.prod(known.value for since, known in contract.adjustments.get(asset, {}).items() if since <= date)


def _not_past(contract: Contract, today: datetime.date) -> list[Fault]:
    """Disrupted days: the level that is stated must be of the past, and an observation moves to a later date."""
    faults = []
    for asset, dates in contract.disruption.items():
        for date, known in dates.items():
            if isinstance(known.value, datetime.date):
                if known.value <= date:
                    text = f"the observation of '{asset}' on {date} is moved to {known.value}; expected a later date"
                    faults.append(Fault(known.place, text))
            elif date > today:
                text = f"the level of '{asset}' on {date} is stated, which lies after the valuation date {today}"
                faults.append(Fault(known.place, text))
    return faults


def said(contract: Contract, history: History) -> list[str]:
    """Sentences about the past that stand beside any value."""
    today = history.valuation
    found = []
    later = sorted({date for levels in history.published.values() for date in levels if date > today} if today else ())
    if later:
        found.append(f"fixings after the valuation date are left out, the first of them of {later[0]}")
    for asset, *rates in history.names:
        levels, rated = history.published.get(asset, {}), history.published.get(rates[0] if rates else asset, {})
        alone = sorted(date for date in levels if date not in rated and date < today)
        if alone:
            found.append(f"fixings of {asset} on days without one of {rates[0]} are left out, the first of them of "
                         f"{alone[0]}")
    for asset, dates in contract.adjustments.items():
        for since, known in dates.items():
            when = "" if today is None or since <= today else "; not in force yet, so it changes nothing"
            found.append(f"levels of {asset} from {since} on count times {known.value:.12g} (adjustment){when}")
    for asset, dates in contract.disruption.items():
        for date, known in dates.items():
            what = f"the level of {known.value}" if isinstance(known.value, datetime.date) else f"{known.value:.12g}"
            found.append(f"the observation of {asset} on {date} takes {what} (disrupted day); payments keep their "
                         "dates")
    return found


def said_of_today(contract: Contract, history: History, today: datetime.date) -> str:
    """Which level an observation on the valuation date uses, for each asset."""
    names, day = contract.assets, Day(0.0, today)
    fixed = [name for number, name in enumerate(names)
             if history.level(number, history.observed(number, day)) is not None]
    if len(fixed) == len(names):
        what = "that day's fixing"
    elif fixed:
        spots = [name for name in names if name not in fixed]
        what = f"that day's fixing of {', '.join(fixed)} and the market's spot of {', '.join(spots)}, not fixed yet"
    else:
        what = "the market's spot"
    halves = "".join(_half_fixed(history, number, day) for number in range(len(names)))
    return f"the observation on {today}, the valuation date, uses {what}{halves}"


def _half_fixed(history: History, number: int, day: Day) -> str:
    """Says that one fixing alone of a composite level, the asset's or the rate's, is left out."""
    parts = history.names[number] if history.names else ()
    lacking = history.missing(number, history.observed(number, day).date)
    if len(lacking) != 1 or len(parts) == 1 or history.level(number, history.observed(number, day)) is not None:
        return ""
    (there,) = (name for name in parts if name not in lacking)
    return f"; that day's fixing of {there} is left out, for that of {lacking[0]} is not in"
