"""From the market document to the tape's leaves: a small, smooth, deterministic map.

Each leaf is an exact integral of the market's curves over one step, or a term of the contract. The map knows nothing of
payoffs. It works on all leaves of one kind at once and holds for complex numbers too, so that a complex step through it
gives its derivative by every number of the market document (`jacobian.py`).
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence

import numpy as np

from mcx.checked.contract import Contract
from mcx.checked.market import Market
from mcx.leaves.correlation import correlation_matrix, lower_factor
from mcx.leaves.curves import LogCurve, log_curve
from mcx.leaves.grouped import Factors, Group, Grouped, grouped
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
        self._nodes = sorted({node.time for curve in drifts if curve for node in curve.nodes if node.time > 0.0})

    def nodes(self) -> tuple[float, ...]:
        """The times at which a drift or a vol of one of the contract's assets changes, in years."""
        return tuple(self._nodes)

    def forward(self, asset: str, time: float) -> float:
        """The forward of an asset; the spot at time 0."""
        number = self.contract.assets.index(asset)
        return float(self._spots[number] * np.exp(self._growth(number, time)))

    def discount(self, time: float) -> float:
        """The discount factor of the contract's currency, without funding."""
        return float(self._rates.factor(time))

    def funded_discount(self, time: float | np.ndarray) -> np.number | np.ndarray:
        """The discount factor for the issuer's payments: the funding spread added to the zero rate."""
        return np.exp(self._rates.log(time) + self._funding.log(time))

    def vol_to(self, asset: str, time: float) -> float:
        """The Black vol of an asset to a time."""
        return self._vols[self.contract.assets.index(asset)].vol_to(time)

    def correlation(self, first: str, second: str) -> float:
        """The correlation of two assets of the contract."""
        names = self.contract.assets
        return float(self._correlation[names.index(first), names.index(second)])

    def values(self, leaves: Iterable[Leaf] | Grouped) -> np.ndarray:
        """The leaves' values, shape (leaves,)."""
        leaves = leaves if isinstance(leaves, Grouped) else grouped(leaves)
        found = [(group.positions, self._values(group)) for group in leaves.groups]
        found += [(factors.positions, self._factors(factors)) for factors in leaves.factors]
        values = np.empty(leaves.size, dtype=np.result_type(np.float64, *(part for _, part in found)))
        for positions, part in found:
            values[positions] = part
        return values

    def _values(self, group: Group) -> np.ndarray:
        asset, starts, ends = group.asset, group.starts, group.ends
        match group.kind:
            case LeafKind.LOG_SPOT:
                return np.full(len(ends), np.log(self._spots[asset]))
            case LeafKind.FORWARD:
                return self._spots[asset] * np.exp(self._growth(asset, ends))
            case LeafKind.VARIANCE:
                return self._variance(asset, starts, ends)
            case LeafKind.DRIFT:
                growth = self._growth(asset, ends) - self._growth(asset, starts)
                return growth - 0.5 * self._variance(asset, starts, ends)
            case LeafKind.DISCOUNT:
                return self.funded_discount(ends)
            case LeafKind.TERM:
                return np.array([figure(self.contract, leaf) for leaf in group.leaves])
        raise ValueError(f"no leaf of the market: {group.kind}")

    def _factors(self, factors: Factors) -> np.ndarray:
        """One factorisation for each step."""
        lower = lower_factor(self.step_covariance(factors.assets, factors.starts, factors.ends))
        return lower[factors.steps, factors.rows, factors.columns]

    def _growth(self, asset: int, time: float | np.ndarray) -> np.ndarray:
        """The log of the forward over the spot."""
        given = self._forwards[asset]
        if given is not None:
            return given.log(time)
        return self._yields[asset].log(time) - self._own_rates[asset].log(time)

    def _variance(self, asset: int, start: np.ndarray, end: np.ndarray) -> np.ndarray:
        vol = self._vols[asset]
        return covariance_integral(vol, vol, start, end)

    def step_covariance(self, assets: Sequence[int], start: np.ndarray, end: np.ndarray) -> np.ndarray:
        """The covariance of the assets' logs over steps, shape (steps, assets, assets): correlation times the integral
        of the product of their vols."""
        rows = [[covariance_integral(self._vols[i], self._vols[j], start, end) * self._correlation[i, j]
                 for j in assets[: number + 1]] for number, i in enumerate(assets)]
        kind = np.result_type(*(values for row in rows for values in row))
        covariance = np.empty((len(start), len(assets), len(assets)), dtype=kind)
        for i, row in enumerate(rows):
            for j, values in enumerate(row):
                covariance[:, i, j] = covariance[:, j, i] = values
        return covariance
