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
    """A point of a curve: years from the valuation date (Actual/365 Fixed), the tenor or date as written, the number."""

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
class AssetMarket:
    """One asset: spot, currency ('' where not stated), vol, and either a yield curve or forwards."""

    name: str
    spot: Quoted
    currency: str
    vol: Curve
    place: Place
    dividend_yield: Curve | None = None
    forwards: Curve | None = None


@dataclass(frozen=True, slots=True)
class Market:
    """Everything observed on the valuation date (None for textbook markets, `market: 0y`)."""

    valuation: datetime.date | None
    rates: dict[str, Curve]
    funding: dict[str, Curve]
    assets: dict[str, AssetMarket]
    correlation: dict[tuple[str, str], Quoted]  # each pair once, as written
    uncertainty: dict[str, Quoted]
    place: Place
    source: str = ""
    as_of: str = ""
    keys: tuple[str, ...] = field(default=())
