"""Exact means of controls under the market: lognormal levels with known forwards and covariances of their logs.

Forwards and covariances are those of the market layer, so that curves of rates, yields and vols come by themselves. All
means are of amounts, not discounted.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from scipy.integrate import quad
from scipy.special import ndtr

from mcx.estimators.reduction.turning import Day, Product
from mcx.leaves.market_map import MarketMap
from mcx.tape.program import Leaf, LeafKind


class Law:
    """The joint law of the logs of levels, without cash dividends to come, on some dates: normal with `means` (days,)
    and `covariance` (days, days). Levels that are converted at the rate of the day move by that rate too."""

    def __init__(self, market: MarketMap, days: Sequence[Day], forward: Callable[[Day], float]):
        self.days = tuple(sorted(days))
        self._at = {day: number for number, day in enumerate(self.days)}
        rates = market.makeup().rates
        times = sorted({time for _, time in days})
        assets = sorted({asset for asset, _ in days})
        moving = sorted({*assets, *(rates[asset] for asset in assets if asset in rates)})
        made_of = np.array([[float(number in (asset, rates.get(asset))) for number in moving] for asset in assets])
        single = market.step_covariance(moving, np.zeros(len(times)), np.array(times))  # (times, moving, moving)
        to_date = made_of @ single @ made_of.T  # (times, assets, assets)
        index = np.array([[times.index(time), assets.index(asset)] for asset, time in self.days]).reshape(-1, 2)
        first = np.minimum.outer(index[:, 0], index[:, 0])
        self.covariance = to_date[first, index[:, 1][:, None], index[:, 1][None, :]]
        self.log_forwards = np.log([forward(day) for day in self.days])
        self.means = self.log_forwards - 0.5 * np.diag(self.covariance)

    def log_forward(self, day: Day) -> float:
        return float(self.log_forwards[self._at[day]])

    def variance_to(self, day: Day) -> float:
        number = self._at[day]
        return float(self.covariance[number, number])

    def lognormal(self, powers: Product, factor: float = 1.0) -> Lognormal:
        """The law of a product of powers of levels times a factor."""
        weights = np.zeros(len(self.days))
        for day, power in powers:
            weights[self._at[day]] = power
        return Lognormal(tuple(powers), math.log(factor), float(weights @ self.means) + math.log(factor), weights,
                         self.covariance @ weights)


@dataclass(frozen=True, slots=True, eq=False)
class Lognormal:
    """exp(shift + sum of power * log level), its log of mean `mu`; `along`: the covariance of its log with each day's."""

    powers: Product
    shift: float
    mu: float
    weights: np.ndarray
    along: np.ndarray

    def covariance(self, other: Lognormal) -> float:
        return float(self.weights @ other.along)

    @property
    def mean(self) -> float:
        return math.exp(self.mu + 0.5 * self.covariance(self))


def exchange_mean(receive: Lognormal, give: Lognormal) -> float:
    """E max(A - B, 0). W. Margrabe, "The value of an option to exchange one asset for another" (1978)."""
    variance = max(receive.covariance(receive) - 2.0 * receive.covariance(give) + give.covariance(give), 0.0)
    deviation = math.sqrt(variance)
    a, b = receive.mean, give.mean
    if deviation < 1e-12:
        return max(a - b, 0.0)
    d = math.log(a / b) / deviation + 0.5 * deviation
    return float(a * ndtr(d) - b * ndtr(d - deviation))


def call_mean(variable: Lognormal, strike: float) -> float:
    """E max(A - strike, 0). F. Black, "The pricing of commodity contracts", J. Financial Economics 3 (1976)."""
    deviation = math.sqrt(max(variable.covariance(variable), 0.0))
    if deviation < 1e-12:
        return max(variable.mean - strike, 0.0)
    d = (variable.mu - math.log(strike)) / deviation
    return float(variable.mean * ndtr(d + deviation) - strike * ndtr(d))


def above_mean(variable: Lognormal, strike: float) -> float:
    """P(A > strike)."""
    deviation = math.sqrt(max(variable.covariance(variable), 0.0))
    if deviation < 1e-12:
        return float(variable.mean > strike)
    return float(ndtr((variable.mu - math.log(strike)) / deviation))


@dataclass(frozen=True, slots=True)
class Walk:
    """A Brownian walk from `start` with `drift` for each unit of variance, over `variance` in all, watched continuously
    on one side of `barrier`: below it where `up`.

    With the start mirrored at the barrier the walks that touched are taken off again: R. Merton, "Theory of rational
    option pricing", Bell J. Economics 4 (1973); M. Rubinstein, E. Reiner, "Breaking down the barriers", Risk 4 (1991).
    """

    start: float
    drift: float
    variance: float
    barrier: float
    up: bool

    def untouched(self, share: float, cash: float, low: float, high: float) -> float:
        """E of (share exp(end) + cash) where the end is between low and high and the barrier was not touched."""
        if self.up:
            low, high = low, min(high, self.barrier)
        else:
            low, high = max(low, self.barrier), high
        if low >= high or (self.start >= self.barrier if self.up else self.start <= self.barrier):
            return 0.0
        image = math.exp(2.0 * self.drift * (self.barrier - self.start))
        mirrored = 2.0 * self.barrier - self.start
        return self._slice(self.start, share, cash, low, high) - image * self._slice(mirrored, share, cash, low, high)

    def _slice(self, start: float, share: float, cash: float, low: float, high: float) -> float:
        deviation, mean = math.sqrt(self.variance), start + self.drift * self.variance

        def below(level: float, tilt: float) -> float:
            return float(ndtr((level - mean) / deviation - tilt))

        chance = below(high, 0.0) - below(low, 0.0)
        shares = below(high, deviation) - below(low, deviation)
        return share * math.exp(mean + 0.5 * self.variance) * shares + cash * chance


def extreme_call_mean(start: float, drift: float, variance: float, strike: float) -> float:
    """E max(highest - strike, 0) of exp of the walk, watched continuously; a negative drift and start mirror it.

    The integral of P(highest > x) over x from the strike, by quadrature (A. Conze, R. Viswanathan, "Path dependent
    options: the case of lookback options", J. Finance 46 (1991), for where it comes from)."""
    return _certain(start, strike) + _tail(start, drift, variance, max(start, math.log(strike)), 1.0)


def extreme_put_mean(start: float, drift: float, variance: float, strike: float) -> float:
    """E max(strike - lowest, 0), likewise."""
    level = min(start, math.log(strike))
    return max(strike - math.exp(start), 0.0) + _tail(-start, -drift, variance, -level, -1.0)


def _certain(start: float, strike: float) -> float:
    return max(math.exp(start) - strike, 0.0)


def _tail(start: float, drift: float, variance: float, level: float, sign: float) -> float:
    """The integral of P(highest > x) exp(sign x) over x from `level`."""
    deviation = math.sqrt(variance)
    mean = drift * variance

    def integrand(x: float) -> float:
        rise = x - start
        hit = ndtr((mean - rise) / deviation) + math.exp(2.0 * drift * rise) * ndtr((-rise - mean) / deviation)
        return hit * math.exp(sign * x)

    end = max(level, start) + max(mean, 0.0) + (abs(mean) + 12.0 * deviation + variance)
    return quad(integrand, level, end, epsabs=1e-13, epsrel=1e-12, limit=400)[0]
