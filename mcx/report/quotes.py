"""What the market says of a contract's assets and issuer today: spots, correlations, funding."""

from __future__ import annotations

from collections.abc import Iterator
from itertools import combinations

from mcx.checked.market import Curve
from mcx.leaves.market_map import MarketMap
from mcx.report.results import Sentence
from mcx.report.wording import figure


def quotes(market: MarketMap) -> Iterator[Sentence]:
    """The numbers that stand in no table by date."""
    stated, currency = market.market, market.contract.currency
    for asset in market.quotes:
        yield Sentence(f"spot of {asset.name}", f"{asset.spot.value:,.12g} {asset.currency or currency}")
    for rate in market.rates_of_exchange:
        yield Sentence(f"spot of {rate.name}", figure(rate.spot.value))
    names = (*market.contract.assets, *(rate.name for rate in market.rates_of_exchange))
    for pair in combinations(names, 2):
        quoted = stated.correlation.get(pair) or stated.correlation[pair[::-1]]
        yield Sentence(f"correlation {'/'.join(pair)}", figure(quoted.value, "percent"))
    funding = stated.funding.get(currency)
    yield Sentence("issuer's funding spread", _spread(funding) if funding else "not stated: none is taken")


def _spread(curve: Curve) -> str:
    """'80 bp', or spreads by tenor."""
    return ", ".join(f"{node.label} {1e4 * node.quoted.value:.12g} bp".strip() for node in curve.nodes)
