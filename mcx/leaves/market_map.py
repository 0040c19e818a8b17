"""From the market document to the tape's leaves: a small, smooth, deterministic map.

Each leaf is an exact integral of the market's curves over one step, or a term of the contract. The map knows nothing of
payoffs. It works on all leaves of one kind at once and holds for complex numbers too, so that a complex step through it
gives its derivative by every number of the market document (`jacobian.py`).
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from functools import partial

import numpy as np

from mcx.checked.contract import Contract
from mcx.checked.conversions import simulated_rates
from mcx.checked.market import AssetMarket, Market
from mcx.dates.dated_contract import DatedContract
from mcx.faults import Fault
from mcx.leaves.correlation import correlation_matrix, lower_factor
from mcx.leaves.curves import log_curve
from mcx.leaves.dividends import payouts, pays_cash
from mcx.leaves.grouped import Factors, Group, Grouped, grouped
from mcx.leaves.vols import VolCurve, covariance_integral, vol_curve
from mcx.tape.formulas import figure
from mcx.tape.program import Leaf, LeafKind
from mcx.tape.steps import Makeup
from mcx.tape.unroll import last_read

MONTHLY, WEEKLY = 12, 52
SOON = 1e-6  # years: before any node
SAME = 1e-12  # of growth and variance: no more than rounding


@dataclass(frozen=True, slots=True)
class Exchange:
    """How an asset of another currency meets the rate of exchange (units of the contract's currency for one of its
    own): the rate's vol, its correlation with the asset, and its number among what is simulated, None where it is
    fixed."""

    vol: VolCurve
    correlation: float
    number: int | None = None


class MarketMap:
    """What a market says about the assets and the currency of one contract. Both are checked already.

    `last` is the last time at which the contract reads a level, which forwards need where cash dividends are escrowed
    (`MarketMap.of` finds it); leaves carry it themselves. Beside the assets, numbered in the contract's order, the
    rates of exchange of composite assets are simulated; they have the numbers after them.
    """

    @classmethod
    def of(cls, market: Market, dated: DatedContract) -> MarketMap:
        """The map for a contract with its dates."""
        in_cash = any(pays_cash(market.assets[name]) for name in dated.contract.assets)
        return cls(market, dated.contract, last_read(dated) if in_cash else None)

    def __init__(self, market: Market, contract: Contract, last: float | None = None):
        self.market, self.contract, self.last = market, contract, last
        self.quotes: list[AssetMarket] = [market.assets[name] for name in contract.assets]
        self.rates_of_exchange = [market.fx[name] for name in
                                  simulated_rates(contract.conversion, contract.currency, market)]
        self._rates = log_curve(market.rates[contract.currency])
        self._funding = log_curve(market.funding.get(contract.currency))
        self._vols: list[VolCurve] = [vol_curve(each.vol) for each in (*self.quotes, *self.rates_of_exchange)]
        names = (*contract.assets, *(each.name for each in self.rates_of_exchange))
        signs = [1.0] * len(self.quotes) + [self._sign(each.per) for each in self.rates_of_exchange]
        self._correlation = correlation_matrix(market.correlation, names) * np.outer(signs, signs)
        self._exchanges = [self._exchange(number, asset) for number, asset in enumerate(self.quotes)]
        self._own_rates = [log_curve(market.rates.get(asset.currency or contract.currency)) for asset in self.quotes]
        self._foreign_rates = [log_curve(market.rates[each.per[each.per[0] == contract.currency]])
                               for each in self.rates_of_exchange]
        self._yields = [log_curve(asset.dividend_yield) for asset in self.quotes]
        self._forwards = [log_curve(asset.forwards, asset.spot.value) if asset.forwards else None
                          for asset in self.quotes]
        self._payouts = [payouts(asset, partial(self._base_growth, number), last)
                         for number, asset in enumerate(self.quotes)]

    def faults(self) -> list[Fault]:
        """Cash dividends that are worth as much as the spot or more."""
        found = []
        for number, asset in enumerate(self.quotes):
            left = self.stripped(number)
            if not left > 0.0:
                found.append(Fault(asset.place, f"the cash dividends of '{asset.name}' up to the contract's last "
                                                f"observation are worth {asset.spot.value - left:.6g} today; its spot "
                                                f"is {asset.spot.value:.6g}"))
        return found

    def nodes(self) -> tuple[float, ...]:
        """The times at which a drift or a vol of what is simulated changes or the contract's discounting, and ex dates,
        in years."""
        market, own = self.market, self.contract.currency
        curves = [market.rates.get(asset.currency or own) for asset in self.quotes]
        curves += [curve for asset in self.quotes for curve in (asset.dividend_yield, asset.forwards, asset.vol)]
        curves += [asset.quanto.fx_vol for asset, meets in zip(self.quotes, self._exchanges, strict=True)
                   if meets and meets.number is None]
        curves += [each.vol for each in self.rates_of_exchange]
        curves += [market.rates[own], market.funding.get(own)]  # also for amounts paid at a hit
        times = {node.time for curve in curves if curve for node in curve.nodes}
        for asset, paid in zip(self.quotes, self._payouts, strict=True):
            times |= {*paid.share_times, *(() if asset.decrement else paid.cash_times)}
        return tuple(sorted(time for time in times if time > 0.0))

    def makeup(self, apart: bool = False) -> Makeup:
        """How the tape makes levels of what is simulated; `apart` where no two assets shall be taken for one."""
        return Makeup(
            cash={number: WEEKLY if self.quotes[number].decrement else MONTHLY
                  for number, paid in enumerate(self._payouts)
                  if any(self.last is None or time < self.last + SOON for time in paid.cash_times)},
            ex=frozenset((number, when) for number, paid in enumerate(self._payouts) for when in paid.share_times),
            rates={number: meets.number for number, meets in enumerate(self._exchanges)
                   if meets and meets.number is not None},
            leaders={} if apart else self._leaders())

    def _leaders(self) -> dict[int, int]:
        """For each asset that always moves as one before it does, the first such."""
        found: dict[int, int] = {}
        for asset in range(len(self.quotes)):
            leader = next((other for other in range(asset) if other not in found and self._as_one(other, asset)), None)
            if leader is not None:
                found[asset] = leader
        return found

    def _as_one(self, one: int, other: int) -> bool:
        """Whether two assets are perfectly correlated and have the same growth and vols throughout; what cash dividends
        take from the spot moves otherwise than the rest, so with these two assets differ, and so they do with vols by
        strike, of which the model bracket gives each its own."""
        numbers = {meets.number if meets else None for meets in (self._exchanges[one], self._exchanges[other])}
        if (self._correlation[one, other] != 1.0 or len(numbers) > 1
                or any(pays_cash(self.quotes[asset]) or self.quotes[asset].by_strike for asset in (one, other))):
            return False
        times = np.array([*(nodes := self.nodes()), *(node + SOON for node in nodes), 1.0 + max(nodes, default=0.0)])
        moves = ([self._growth(asset, times), self._variance(asset, -1, np.zeros_like(times), times)]
                 for asset in (one, other))
        return np.allclose(*moves, rtol=SAME, atol=SAME)

    def forward(self, asset: str, time: float) -> float:
        """The forward of an asset in the contract's currency, at a fixed rate of exchange (quanto) or at that of the
        day (composite); the spot at time 0."""
        return float(self._forward(self.contract.assets.index(asset), time))

    def escrowed(self, asset: int, time: float | np.ndarray, last: float | np.ndarray) -> np.number | np.ndarray:
        """What the cash dividends after a time and up to `last` are worth then, in the asset's currency."""
        paid = self._payouts[asset]
        return (paid.cash_to(last) - paid.cash_to(time)) * np.exp(self._own_growth(asset, time))

    def stripped(self, asset: int, last: float | np.ndarray | None = None) -> np.number | np.ndarray:
        """The spot without the cash dividends up to the last observation: what the vol is about."""
        last = (self.last or 0.0) if last is None else last
        return self.quotes[asset].spot.value - self._payouts[asset].cash_to(last)

    def discount(self, time: float) -> float:
        """The discount factor of the contract's currency, without funding."""
        return float(self._rates.factor(time))

    def funded_discount(self, time: float | np.ndarray) -> np.number | np.ndarray:
        """The discount factor for the issuer's payments: the funding spread added to the zero rate."""
        return np.exp(self._rates.log(time) + self._funding.log(time))

    def vol_to(self, asset: str, time: float) -> float:
        """The Black vol of an asset to a time: of its level without cash dividends to come, in the contract's currency
        if it is converted at the rate of the day."""
        number = self.contract.assets.index(asset)
        meets = self._exchanges[number]
        if meets is None or meets.number is None:
            return self._vols[number].vol_to(time)
        time = time or SOON
        return math.sqrt(self._variance(number, meets.number, 0.0, time) / time)

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
        rate = asset >= len(self.quotes)
        lasts = np.array([leaf.last for leaf in group.leaves])
        match group.kind:
            case LeafKind.LOG_SPOT:
                return np.log(np.full(len(ends), self._fx_spot(asset)) if rate else self.stripped(asset, lasts))
            case LeafKind.FORWARD:
                return np.array([self._forward(asset, end) for end in ends])
            case LeafKind.VARIANCE:
                return self._variance(asset, group.leaves[0].other, starts, ends)
            case LeafKind.DRIFT:
                growth = self._fx_growth if rate else self._growth
                return growth(asset, ends) - growth(asset, starts) - 0.5 * self._variance(asset, -1, starts, ends)
            case LeafKind.JUMP:
                return self._payouts[asset].shares_at(ends)
            case LeafKind.ESCROW:
                return self.escrowed(asset, ends, lasts)
            case LeafKind.MEAN_ESCROW:
                paid = self._payouts[asset]
                before = self._own_growth(asset, ends) - paid.shares_at(ends)
                closing = (paid.cash_to(lasts) - paid.cash_before(ends)) * np.exp(before)
                return 0.5 * (self.escrowed(asset, starts, lasts) + closing)
            case LeafKind.DISCOUNT:
                return self.funded_discount(ends)
            case LeafKind.TERM | LeafKind.LENGTH:
                return np.array([figure(self.contract, leaf) for leaf in group.leaves])
        raise ValueError(f"no leaf of the market: {group.kind}")

    def _factors(self, factors: Factors) -> np.ndarray:
        """One factorisation for each step."""
        lower = lower_factor(self.step_covariance(factors.assets, factors.starts, factors.ends))
        return lower[factors.steps, factors.rows, factors.columns]

    def _exchange(self, number: int, asset: AssetMarket) -> Exchange | None:
        how = self.contract.conversion.get(asset.name)
        if how == "quanto":
            correlation = self._sign(asset.quanto.per) * asset.quanto.fx_correlation.value
            return Exchange(vol_curve(asset.quanto.fx_vol), correlation)
        if how == "composite":
            rate = self.market.fx_between(asset.currency, self.contract.currency)
            row = len(self.quotes) + self.rates_of_exchange.index(rate)
            return Exchange(self._vols[row], self._correlation[number, row], row)
        return None

    def _sign(self, per: tuple[str, str]) -> float:
        """-1 where a rate of exchange is quoted the other way round than in the contract's currency: its log turns."""
        return 1.0 if per[0] == self.contract.currency else -1.0

    def _forward(self, number: int, time: float) -> float:
        meets = self._exchanges[number]
        composite = meets is not None and meets.number is not None
        if time == 0.0:
            level = self.quotes[number].spot.value  # to the last digit
        elif pays_cash(self.quotes[number]):
            assert self.last is not None, "cash dividends need the time of the last observation"
            growth = self._own_growth if composite else self._growth
            level = self.stripped(number) * np.exp(growth(number, time)) + self.escrowed(number, time, self.last)
        else:
            growth = self._own_growth if composite else self._growth
            level = self.quotes[number].spot.value * np.exp(growth(number, time))
        return level * self._fx_spot(meets.number) * np.exp(self._fx_growth(meets.number, time)) if composite else level

    def _fx_spot(self, number: int) -> float:
        rate = self.rates_of_exchange[number - len(self.quotes)]
        return rate.spot.value ** self._sign(rate.per)

    def _fx_growth(self, number: int, time: float | np.ndarray) -> np.ndarray:
        """The log of the forward over the spot of a rate of exchange, by the difference of both currencies' rates."""
        return self._foreign_rates[number - len(self.quotes)].log(time) - self._rates.log(time)

    def _base_growth(self, asset: int, time: float | np.ndarray) -> np.ndarray:
        """The log of the forward over the spot before dividends, in the asset's own currency."""
        given, decrement = self._forwards[asset], self.quotes[asset].decrement
        if given is not None:
            return given.log(time)
        taken = decrement.quoted.value * time if decrement and not decrement.points else 0.0
        return self._yields[asset].log(time) - self._own_rates[asset].log(time) - taken

    def _own_growth(self, asset: int, time: float) -> float:
        """The same with dividends that are shares."""
        return self._base_growth(asset, time) + self._payouts[asset].shares_to(time)

    def _growth(self, asset: int, time: float) -> float:
        """The same under the measure of the contract's currency: less the covariance with the rate of exchange."""
        meets = self._exchanges[asset]
        if meets is None:
            return self._own_growth(asset, time)
        together = covariance_integral(self._vols[asset], meets.vol, 0.0, time) * meets.correlation
        return self._own_growth(asset, time) - together

    def _variance(self, asset: int, other: int, start: np.ndarray, end: np.ndarray) -> np.ndarray:
        """The variances of a log over steps, or those of the sum of two of them."""
        vol = self._vols[asset]
        own = covariance_integral(vol, vol, start, end)
        if other < 0:
            return own
        with_it = self._vols[other]
        together = covariance_integral(vol, with_it, start, end) * self._correlation[asset, other]
        return own + 2.0 * together + covariance_integral(with_it, with_it, start, end)

    def step_covariance(self, assets: Sequence[int], start: np.ndarray, end: np.ndarray) -> np.ndarray:
        """The covariance of the logs over steps, shape (steps, assets, assets), rates of exchange by their numbers:
        correlation times the integral of the product of their vols."""
        rows = [[covariance_integral(self._vols[i], self._vols[j], start, end) * self._correlation[i, j]
                 for j in assets[: number + 1]] for number, i in enumerate(assets)]
        kind = np.result_type(*(values for row in rows for values in row))
        covariance = np.empty((len(start), len(assets), len(assets)), dtype=kind)
        for i, row in enumerate(rows):
            for j, values in enumerate(row):
                covariance[:, i, j] = covariance[:, j, i] = values
        return covariance
