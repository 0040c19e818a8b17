"""A checked market: what was observed, as stated, each number with its place, source and uncertainty."""

from __future__ import annotations

import datetime
from dataclasses import dataclass, field

from mcx.faults import Place


@dataclass(frozen=True, slots=True)
class Quoted:
    """A number of the market document: value in natural units (17% is 0.17), and what was said about it."""

    value: float
    place: Place
    uncertain: float | None = None  # 90 % half-width
    source: str = ""
    as_of: str = ""


@dataclass(frozen=True, slots=True)
class Node:
    """A point of a curve: years from the valuation date (Actual/365 Fixed), the tenor or date as written, the
    number."""

    time: float
    label: str
    quoted: Quoted


@dataclass(frozen=True, slots=True)
class RateConvention:
    """How zero rates are meant: `compounding` is 'continuous', 'annual' or 'simple', the time counts from `since` (the
    valuation date, None in textbook markets) by `day_count`."""

    compounding: str = "continuous"
    day_count: str = "Actual/365 (Fixed)"
    since: datetime.date | None = None


@dataclass(frozen=True, slots=True)
class Curve:
    """Points in order of time; a flat number is a single node at time 0 with label ''.

    `form`: 'zero' (zero rates, also funding spreads and yields), 'discount' (discount factors), 'forward' (forwards of
    an asset) or 'vol' (Black vols). `convention` is about zero rates.
    """

    form: str
    nodes: tuple[Node, ...]
    place: Place
    convention: RateConvention = RateConvention()

    @property
    def flat(self) -> bool:
        return len(self.nodes) == 1 and self.nodes[0].label == ""


@dataclass(frozen=True, slots=True)
class Dividend:
    """A dividend: on its ex date the level falls by `share` of itself and by `cash` in the asset's currency (either may
    be None). `time` is in years from the valuation date, not positive where the spot is ex it already."""

    time: float
    label: str
    place: Place
    cash: Quoted | None = None
    share: Quoted | None = None


@dataclass(frozen=True, slots=True)
class Blend:
    """Cash dividends up to `cash_until` stay cash; those from `share_from` on become a share of the level, and those
    between the two in part, linearly in time. Forwards stay as they are with cash. Times in years."""

    cash_until: float
    share_from: float
    place: Place


@dataclass(frozen=True, slots=True)
class Decrement:
    """What an index with a decrement gives up each year: a share of itself, or `points` of its level in cash."""

    quoted: Quoted
    points: bool


@dataclass(frozen=True, slots=True)
class Quanto:
    """What a payment at a fixed rate of exchange needs: the vol of the rate and its correlation with the asset; the
    rate is quoted as units of `per[0]` for one unit of `per[1]`."""

    fx_vol: Curve
    fx_correlation: Quoted
    per: tuple[str, str]
    place: Place


@dataclass(frozen=True, slots=True)
class FxMarket:
    """A rate of exchange, units of `per[0]` for one unit of `per[1]`; `name` as written, 'EUR per USD'."""

    name: str
    per: tuple[str, str]
    spot: Quoted
    vol: Curve
    place: Place


@dataclass(frozen=True, slots=True)
class StrikeVols:
    """Black vols by strike: a curve for each strike, in rising order, all with the same tenors. Strikes are shares of
    the spot (`relative`) or levels in the asset's currency; so is `priced_at`, the strike whose vols price a contract.
    """

    strikes: tuple[float, ...]
    curves: tuple[Curve, ...]
    relative: bool
    priced_at: float
    place: Place


@dataclass(frozen=True, slots=True)
class AssetMarket:
    """One asset: spot, currency ('' where not stated), vol, and what its level gives up: a yield curve, dividends, or
    forwards that say it; nothing at all where it is a `total_return` index, but for a decrement. Where vols are given
    `by_strike`, `vol` is the curve of the strike that they are `priced_at`."""

    name: str
    spot: Quoted
    currency: str
    vol: Curve
    place: Place
    dividend_yield: Curve | None = None
    forwards: Curve | None = None
    dividends: tuple[Dividend, ...] = ()  # in order of time, those of the past as well
    blend: Blend | None = None
    total_return: bool = False
    decrement: Decrement | None = None
    quanto: Quanto | None = None
    by_strike: StrikeVols | None = None


@dataclass(frozen=True, slots=True)
class Market:
    """Everything observed on the valuation date (None for textbook markets, `market: 0y`)."""

    valuation: datetime.date | None
    rates: dict[str, Curve]
    funding: dict[str, Curve]
    assets: dict[str, AssetMarket]
    correlation: dict[tuple[str, str], Quoted]  # each pair once, as written; rates of exchange by their names
    uncertainty: dict[str, Quoted]
    place: Place
    source: str = ""
    as_of: str = ""
    keys: tuple[str, ...] = field(default=())
    fx: dict[str, FxMarket] = field(default_factory=dict)
    fixings: dict[str, dict[datetime.date, float]] = field(default_factory=dict)  # by asset, or rate of exchange
    fixings_sound: bool = True  # whether all of them could be read
    fixings_place: Place | None = None  # where they stand, or where they would

    def fx_between(self, one: str, other: str) -> FxMarket | None:
        """The rate of exchange of two currencies, whichever way it is quoted."""
        return next((each for each in self.fx.values() if set(each.per) == {one, other}), None)
