"""From the market document to the tape's leaves: a small, smooth, deterministic map.

Each leaf is an exact integral of the market's curves over one step, or a term of the contract. The map knows nothing of
payoffs; its derivative by every number of the market document belongs here as well, when sensitivities are asked for.
"""

from __future__ import annotations

import math
from collections.abc import Iterable

import numpy as np

from mcx.checked.contract import Contract
from mcx.checked.market import Market
from mcx.leaves.correlation import correlation_matrix, lower_factor
from mcx.leaves.curves import LogCurve, log_curve
from mcx.leaves.vols import VolCurve, covariance_integral, vol_curve
from mcx.tape.formulas import figure
from mcx.tape.program import Leaf, LeafKind


class MarketMap:
    """What a market says about the assets and the currency of one contract. Both are checked already."""

    def __init__(self, market: Market, contract: Contract):
        self.contract = contract
        self._quotes = [market.assets[name] for name in contract.assets]
        self._spots = [asset.spot.value for asset in self._quotes]
        self._rates = log_curve(market.rates[contract.currency])
        self._funding = log_curve(market.funding.get(contract.currency))
        self._vols: list[VolCurve] = [vol_curve(asset.vol) for asset in self._quotes]
        self._correlation = correlation_matrix(market.correlation, contract.assets)
        self._own_rates: list[LogCurve] = []
        self._yields: list[LogCurve] = []
        self._forwards: list[LogCurve | None] = []
        for asset in self._quotes:
            self._own_rates.append(log_curve(market.rates[asset.currency or contract.currency]))
            self._yields.append(log_curve(asset.dividend_yield))
            self._forwards.append(log_curve(asset.forwards, asset.spot.value) if asset.forwards else None)
        drifts = [market.rates[asset.currency or contract.currency] for asset in self._quotes]
        drifts += [asset.dividend_yield for asset in self._quotes] + [asset.forwards for asset in self._quotes]
        drifts += [asset.vol for asset in self._quotes]
        drifts += [market.rates[contract.currency], market.funding.get(contract.currency)]  # for amounts paid at a hit
        self._nodes = sorted({node.time for curve in drifts if curve for node in curve.nodes if node.time > 0.0})

    def nodes(self) -> tuple[float, ...]:
        """The times at which a drift or a vol of one of the contract's assets or its discounting changes, in years."""
        return tuple(self._nodes)

    def forward(self, asset: str, time: float) -> float:
        """The forward of an asset; the spot at time 0."""
        number = self.contract.assets.index(asset)
        return self._spots[number] * math.exp(self._growth(number, time))

    def discount(self, time: float) -> float:
        """The discount factor of the contract's currency, without funding."""
        return self._rates.factor(time)

    def funded_discount(self, time: float) -> float:
        """The discount factor for the issuer's payments: the funding spread added to the zero rate."""
        return math.exp(self._rates.log(time) + self._funding.log(time))

    def vol_to(self, asset: str, time: float) -> float:
        """The Black vol of an asset to a time."""
        return self._vols[self.contract.assets.index(asset)].vol_to(time)

    def correlation(self, first: str, second: str) -> float:
        """The correlation of two assets of the contract."""
        names = self.contract.assets
        return float(self._correlation[names.index(first), names.index(second)])

    def values(self, leaves: Iterable[Leaf]) -> np.ndarray:
        """The leaves' values, shape (leaves,)."""
        leaves = tuple(leaves)
        factors = self._factors(leaves)
        return np.array([factors[leaf] if leaf in factors else self._value(leaf) for leaf in leaves], dtype=np.float64)

    def _value(self, leaf: Leaf) -> float:
        match leaf.kind:
            case LeafKind.LOG_SPOT:
                return math.log(self._spots[leaf.asset])
            case LeafKind.FORWARD:
                return self._spots[leaf.asset] * math.exp(self._growth(leaf.asset, leaf.end))
            case LeafKind.VARIANCE:
                return self._variance(leaf)
            case LeafKind.DRIFT:
                growth = self._growth(leaf.asset, leaf.end) - self._growth(leaf.asset, leaf.start)
                return growth - 0.5 * self._variance(leaf)
            case LeafKind.DISCOUNT:
                return self.funded_discount(leaf.end)
            case LeafKind.TERM:
                return figure(self.contract, leaf)
        raise ValueError(f"no leaf of the market: {leaf.kind}")

    def _growth(self, asset: int, time: float) -> float:
        """The log of the forward over the spot."""
        given = self._forwards[asset]
        if given is not None:
            return given.log(time)
        return self._yields[asset].log(time) - self._own_rates[asset].log(time)

    def _variance(self, leaf: Leaf) -> float:
        vol = self._vols[leaf.asset]
        return covariance_integral(vol, vol, leaf.start, leaf.end)

    def _factors(self, leaves: Iterable[Leaf]) -> dict[Leaf, float]:
        """All FACTOR leaves, one factorisation for each step and the assets that move in it."""
        steps: dict[tuple[float, float], list[Leaf]] = {}
        for leaf in leaves:
            if leaf.kind is LeafKind.FACTOR:
                steps.setdefault((leaf.start, leaf.end), []).append(leaf)
        found: dict[Leaf, float] = {}
        for (start, end), wanted in steps.items():
            assets = sorted({asset for leaf in wanted for asset in (leaf.asset, leaf.other)})
            factor = lower_factor(self.step_covariance(assets, start, end))
            row = {asset: number for number, asset in enumerate(assets)}
            found.update({leaf: float(factor[row[leaf.asset], row[leaf.other]]) for leaf in wanted})
        return found

    def step_covariance(self, assets: list[int], start: float, end: float) -> np.ndarray:
        """The covariance of the assets' logs over a step, shape (assets, assets): correlation times the integral of
        the product of their vols."""
        covariance = np.empty((len(assets), len(assets)))
        for i, first in enumerate(assets):
            for j, second in enumerate(assets[: i + 1]):
                integral = covariance_integral(self._vols[first], self._vols[second], start, end)
                covariance[i, j] = covariance[j, i] = self._correlation[first, second] * integral
        return covariance
