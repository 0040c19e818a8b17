"""The numbers of a market document that a contract hangs on, markets with some of them moved, and the derivative of
every leaf by each of them.

A number is moved in the coordinate that its sensitivity is quoted in: spots, vols, zero rates, spreads, yields,
forwards and correlations by a sum, a discount factor by a sum on its zero rate. A spot takes the forwards of its asset
along, in proportion: what moves is the level, not the growth.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from itertools import combinations

import numpy as np

from mcx.checked.contract import Contract
from mcx.checked.conversions import simulated_rates
from mcx.checked.market import AssetMarket, Curve, Market, Node, Quoted
from mcx.faults import Place
from mcx.leaves.correlation import SINGULAR, correlation_matrix, lower_factor
from mcx.leaves.grouped import grouped
from mcx.leaves.market_map import MarketMap
from mcx.tape.program import Leaf

Shifts = Mapping[tuple[str, str, str], float | complex]  # by kind, subject and tenor
STEP = 1e-40  # of the complex step: no digit of the real part can feel it


@dataclass(frozen=True, slots=True)
class Input:
    """A number of the market document. `kind` is spot, vol, rate, funding, yield, forward or correlation; dividend
    (cash), dividend share, decrement or decrement points; fx spot, fx vol or fx correlation (of a quanto). `subject` is
    the asset, the pair as written ('harbour/quarry'), the rate of exchange or the currency; `tenor` the node or ex date as
    written, '' for a flat number."""

    kind: str
    subject: str
    tenor: str
    value: float
    place: Place

    def __str__(self) -> str:
        return f"{self.kind} of {self.subject}" + (f" at {self.tenor}" if self.tenor else "")


def inputs(market: Market, contract: Contract) -> tuple[Input, ...]:
    """Every number that the contract's value can depend on, in the order: by asset, by currency, by pair."""
    found: list[Input] = []
    currencies = dict.fromkeys([contract.currency])
    for name in contract.assets:
        asset = market.assets[name]
        currencies.update(dict.fromkeys([asset.currency or contract.currency]))
        found.append(Input("spot", name, "", asset.spot.value, asset.spot.place))
        for kind, curve in (("vol", asset.vol), ("yield", asset.dividend_yield), ("forward", asset.forwards)):
            found += _nodes(kind, name, curve)
        found += [*_given_up(asset), *_of_quanto(asset, contract)]
    rates = simulated_rates(contract.conversion, contract.currency, market)
    for name in rates:
        rate = market.fx[name]
        found.append(Input("fx spot", name, "", rate.spot.value, rate.spot.place))
        found += _nodes("fx vol", name, rate.vol)
        currencies.update(dict.fromkeys(rate.per))
    for currency in currencies:
        found += _nodes("rate", currency, market.rates.get(currency))
    found += _nodes("funding", contract.currency, market.funding.get(contract.currency))
    for pair in combinations((*contract.assets, *rates), 2):
        written = pair if pair in market.correlation else pair[::-1]
        quoted = market.correlation[written]
        found.append(Input("correlation", "/".join(written), "", quoted.value, quoted.place))
    return tuple(found)


def moved(market: Market, shifts: Mapping[Input, float | complex]) -> Market:
    """The market with each of the given numbers moved by its shift, all others as they stand."""
    by = {(number.kind, number.subject, number.tenor): shift for number, shift in shifts.items()}
    correlation = {pair: _quoted(quoted, by.get(("correlation", "/".join(pair), "")))
                   for pair, quoted in market.correlation.items()}
    return replace(
        market,
        rates={name: _curve(curve, by, "rate", name) for name, curve in market.rates.items()},
        funding={name: _curve(curve, by, "funding", name) for name, curve in market.funding.items()},
        assets={name: _asset(asset, by) for name, asset in market.assets.items()},
        correlation=correlation,
        fx={name: replace(rate, spot=_quoted(rate.spot, by.get(("fx spot", name, ""))),
                          vol=_curve(rate.vol, by, "fx vol", name)) for name, rate in market.fx.items()},
    )


def jacobian(market: Market, contract: Contract, leaves: Sequence[Leaf]) -> np.ndarray:
    """d leaf / d number, shape (leaves, numbers), the numbers as `inputs` lists them: by a complex step, so exact to
    rounding (W. Squire & G. Trapp, "Using complex variables to estimate derivatives of real functions", 1998)."""
    groups, numbers = grouped(leaves), inputs(market, contract)
    found = np.empty((groups.size, len(numbers)))
    for column, number in enumerate(numbers):
        shifted = MarketMap(moved(market, {number: complex(0.0, STEP)}), contract)
        found[:, column] = shifted.values(groups).imag / STEP
    return found


def without_derivative(market: Market, contract: Contract) -> dict[Input, str]:
    """Numbers at which some leaf has a kink, with the reason: a vol beside a stretch without variance, and all
    correlations where the matrix is singular."""
    found: dict[Input, str] = {}
    numbers = inputs(market, contract)
    rates = simulated_rates(contract.conversion, contract.currency, market)
    curves = [("vol", name, market.assets[name].vol) for name in contract.assets]
    curves += [("fx vol", name, market.assets[name].quanto.fx_vol) for name in contract.assets
               if contract.conversion.get(name) == "quanto"]
    curves += [("fx vol", name, market.fx[name].vol) for name in rates]
    for kind, name, curve in curves:
        for before, node in zip(curve.nodes, curve.nodes[1:], strict=False):
            held, total = (one.quoted.value**2 * one.time for one in (before, node))
            if total <= held:
                text = f"{name} has no variance between {before.label} and {node.label}: its vol there can only rise"
                found.update({number: text for number in numbers if (number.kind, number.subject) == (kind, name)
                              and number.tenor in (before.label, node.label)})
    matrix = correlation_matrix(market.correlation, (*contract.assets, *rates))
    if np.any(np.diag(lower_factor(matrix)) ** 2 <= SINGULAR):
        text = "the correlation matrix is singular: not every correlation can move both ways"
        found.update({number: text for number in numbers if number.kind == "correlation"})
    return found


def _nodes(kind: str, subject: str, curve: Curve | None) -> list[Input]:
    nodes = curve.nodes if curve else ()
    return [Input(kind, subject, node.label, node.quoted.value, node.quoted.place) for node in nodes]


def _given_up(asset: AssetMarket) -> Iterator[Input]:
    """Dividends to come and a decrement; what is nil is left out, since there the number may only rise."""
    for dividend in asset.dividends:
        for kind, quoted in (("dividend", dividend.cash), ("dividend share", dividend.share)):
            if quoted is not None and quoted.value and dividend.time > 0.0:
                yield Input(kind, asset.name, dividend.label, quoted.value, quoted.place)
    if asset.decrement is not None:
        kind, quoted = "decrement points" if asset.decrement.points else "decrement", asset.decrement.quoted
        yield Input(kind, asset.name, "", quoted.value, quoted.place)


def _of_quanto(asset: AssetMarket, contract: Contract) -> Iterator[Input]:
    """The vol of a fixed rate of exchange and its correlation with the asset."""
    if contract.conversion.get(asset.name) == "quanto":
        yield from _nodes("fx vol", asset.name, asset.quanto.fx_vol)
        quoted = asset.quanto.fx_correlation
        yield Input("fx correlation", asset.name, "", quoted.value, quoted.place)


def _asset(asset: AssetMarket, by: Shifts) -> AssetMarket:
    spot = _quoted(asset.spot, by.get(("spot", asset.name, "")))
    forwards = _curve(asset.forwards, by, "forward", asset.name)
    if forwards and spot is not asset.spot:
        ratio = spot.value / asset.spot.value
        forwards = _nodes_by(forwards, lambda node: node.quoted.value * ratio)
    def shifted(quoted: Quoted | None, kind: str, label: str) -> Quoted | None:
        return quoted and _quoted(quoted, by.get((kind, asset.name, label)))

    dividends = tuple(replace(each, cash=shifted(each.cash, "dividend", each.label),
                              share=shifted(each.share, "dividend share", each.label)) for each in asset.dividends)
    decrement, quanto, by_strike = asset.decrement, asset.quanto, asset.by_strike
    if by_strike is not None:  # every strike moves as the one that prices the contract
        curves = tuple(_curve(curve, by, "vol", asset.name) for curve in by_strike.curves)
        by_strike = replace(by_strike, curves=curves)
    if decrement is not None:
        kind = "decrement points" if decrement.points else "decrement"
        decrement = replace(decrement, quoted=shifted(decrement.quoted, kind, ""))
    if quanto is not None:
        quanto = replace(quanto, fx_vol=_curve(quanto.fx_vol, by, "fx vol", asset.name),
                         fx_correlation=shifted(quanto.fx_correlation, "fx correlation", ""))
    return replace(asset, spot=spot, dividends=dividends, decrement=decrement, quanto=quanto,
                   by_strike=by_strike, vol=_curve(asset.vol, by, "vol", asset.name), forwards=forwards,
                   dividend_yield=_curve(asset.dividend_yield, by, "yield", asset.name))


def _curve(curve: Curve | None, by: Shifts, kind: str, subject: str) -> Curve | None:
    if curve is None or not any((kind, subject, node.label) in by for node in curve.nodes):
        return curve

    def value(node: Node) -> float | complex:
        shift = by.get((kind, subject, node.label), 0.0)
        held = node.quoted.value
        return held * np.exp(-shift * node.time) if curve.form == "discount" else held + shift

    return _nodes_by(curve, value)


def _nodes_by(curve: Curve, value: Callable[[Node], float | complex]) -> Curve:
    """The curve with other numbers at its nodes."""
    return replace(curve, nodes=tuple(replace(node, quoted=replace(node.quoted, value=value(node)))
                                      for node in curve.nodes))


def _quoted(quoted: Quoted, shift: float | complex | None) -> Quoted:
    return quoted if shift is None else replace(quoted, value=quoted.value + shift)
