"""The reference's own market mathematics: curves, variances, factors and bridges from a checked `Market`.

Rates interpolate linearly in time times rate (log-linearly in discount factors) and go on at the last forward rate;
total variance interpolates linearly and goes on at the last vol. Nothing here is shared with `mcx/leaves`.
"""

from __future__ import annotations

import cmath
import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

from scipy.optimize import brentq

from mcx.checked.contract import Contract
from mcx.checked.market import Curve, Market

ROUNDING = 1e-12  # of a variance: what is left of it after the other assets is then no randomness of its own


@dataclass(frozen=True)
class StepNumbers:
    """What moves the assets between two dates: drift and variance of each log, and the lower triangular factor."""

    drifts: tuple[float, ...]
    variances: tuple[float, ...]
    factor: tuple[tuple[float, ...], ...]


class PlainMarket:
    """Rates, yields and vols of a checked market for one contract; times in years from the valuation date."""

    def __init__(self, market: Market, contract: Contract):
        self.currency = contract.currency
        self.market = market
        self.assets = [market.assets[name] for name in contract.assets]
        self.nodes = self.times_of_change()

    @staticmethod
    def line(curve: Curve, time: float, height: Callable[[float, float], float], flat: bool = False) -> float:
        """`height(time, quote)` at the nodes, straight lines from (0, 0) through them, the last line going on; or,
        with `flat`, the last quote holding for ever after."""
        if curve.flat:
            return height(time, curve.nodes[0].quoted.value)
        nodes = [(node.time, node.quoted.value) for node in curve.nodes if node.time > 0]
        if flat and time >= nodes[-1][0]:
            return height(time, nodes[-1][1])
        points = [(0.0, 0.0)] + [(t, height(t, quote)) for t, quote in nodes]
        after = next((k for k in range(1, len(points)) if points[k][0] >= time), len(points) - 1)
        (t0, h0), (t1, h1) = points[after - 1], points[after]
        return h0 + (h1 - h0) * (time - t0) / (t1 - t0)

    def accrued(self, curve: Curve, time: float) -> float:
        """The integral of the forward rate to `time`."""
        if curve.form == "discount":
            return self.line(curve, time, lambda t, factor: -math.log(factor))
        return self.line(curve, time, lambda t, rate: rate * t)

    def growth(self, asset: int, time: float) -> float:
        """log of forward over spot."""
        one = self.assets[asset]
        if one.forwards is not None:
            return self.line(one.forwards, time, lambda t, forward: math.log(forward / one.spot.value))
        gained = self.accrued(self.market.rates[one.currency or self.currency], time)
        return gained - (self.accrued(one.dividend_yield, time) if one.dividend_yield else 0.0)

    def variance(self, asset: int, time: float) -> float:
        """Total variance of the log to `time`."""
        return self.line(self.assets[asset].vol, time, lambda t, vol: vol * vol * t, flat=True)

    def discount(self, time: float) -> float:
        """Funded discount factor of the contract's currency."""
        spread = self.market.funding.get(self.currency)
        held = self.accrued(self.market.rates[self.currency], time)
        return math.exp(-held - (self.accrued(spread, time) if spread else 0.0))

    def correlation(self, one: int, other: int) -> float:
        if one == other:
            return 1.0
        names = (self.assets[one].name, self.assets[other].name)
        return (self.market.correlation.get(names) or self.market.correlation[names[::-1]]).value

    def times_of_change(self) -> list[float]:
        """Times at which a rate, yield or vol of the contract's assets may change."""
        curves: list[Curve | None] = []
        for asset in self.assets:
            curves += [asset.vol, asset.dividend_yield, asset.forwards]
            curves += [self.market.rates[asset.currency or self.currency]]
        return sorted({node.time for curve in curves if curve for node in curve.nodes if node.time > 0})

    def covariance(self, one: int, other: int, start: float, end: float) -> float:
        """Correlation times the integral of both vols, piece by piece between the nodes."""
        cuts = [start, *(t for t in self.nodes if start < t < end), end]
        total = 0.0
        for t0, t1 in zip(cuts, cuts[1:], strict=False):
            gains = [max(self.variance(k, t1) - self.variance(k, t0), 0.0) for k in (one, other)]
            total += math.sqrt(gains[0] * gains[1])
        return self.correlation(one, other) * total

    def step(self, assets: Sequence[int], start: float, end: float) -> StepNumbers:
        """Drifts, variances and the Cholesky factor of one step, for the assets that move."""
        rows = [[0.0] * len(assets) for _ in assets]
        for i, one in enumerate(assets):
            for j, other in enumerate(assets[: i + 1]):
                rest = self.covariance(one, other, start, end) - sum(rows[i][k] * rows[j][k] for k in range(j))
                if i == j:
                    rows[i][i] = math.sqrt(rest) if rest > ROUNDING * self.covariance(one, one, start, end) else 0.0
                elif rows[j][j] > 0:
                    rows[i][j] = rest / rows[j][j]
        variances = tuple(self.covariance(one, one, start, end) for one in assets)
        drifts = tuple(self.growth(one, end) - self.growth(one, start) - variance / 2
                       for one, variance in zip(assets, variances, strict=True))
        return StepNumbers(drifts, variances, tuple(map(tuple, rows)))


def bridge_low(x0: float, x1: float, variance: float, uniform: float) -> float:
    """The minimum of a Brownian bridge from x0 to x1: P(minimum < m) = exp(-2 (x0 - m)(x1 - m) / variance).

    Karatzas & Shreve (1991), Brownian Motion and Stochastic Calculus, section 2.8, solved for m.
    """
    return 0.5 * (x0 + x1 - math.sqrt((x1 - x0) ** 2 - 2.0 * variance * math.log(uniform)))


def bridge_high(x0: float, x1: float, variance: float, uniform: float) -> float:
    """The maximum: the minimum of the bridge turned upside down."""
    return -bridge_low(-x0, -x1, variance, uniform)


def moment_of_hit(d0: float, d1: float, variance: float, normal: float, uniform: float) -> float:
    """Which part of a step has passed when a bridge with ends d0 and d1 away from a level reaches it first, given that
    it does: s = t / (1 - t) is inverse Gaussian with the mean d0 / d1 and the shape d0^2 / variance. A draw of it solves
    (s - mean)^2 shape / (mean^2 s) = normal^2 by one of its two roots (Michael, Schucany & Haas 1976)."""
    mean, shape = d0 / d1, d0 * d0 / variance
    doubled = 2.0 + normal * normal * mean / shape  # the roots over the mean multiply to 1 and add up to this
    small = 2.0 / (doubled + math.sqrt(doubled * doubled - 4.0))
    root = mean * (small if uniform <= 1.0 / (1.0 + small) else 1.0 / small)
    return root / (1.0 + root)


def within(x0: complex, x1: complex, low: complex, high: complex, variance: float) -> complex:
    """The probability that a bridge stays between two barriers: its images in both of them (Feller 1971, II, X.5)."""
    total, width = 0.0, high - low
    for n in range(-12, 13):
        total += cmath.exp(((x1 - x0) ** 2 - (x1 - x0 + 2 * n * width) ** 2) / (2 * variance))
        total -= cmath.exp(((x1 - x0) ** 2 - (x1 + x0 - 2 * low + 2 * n * width) ** 2) / (2 * variance))
    return total


def bridge_high_given_low(x0: float, x1: float, variance: float, low: float, uniform: float) -> float:
    """The maximum of a bridge whose minimum is known: the derivative of `within` by the lower barrier, taken along the
    imaginary axis (Squire & Trapp 1998), over that without an upper barrier, set equal to the uniform."""
    if variance == 0.0:
        return max(x0, x1)
    density = 2.0 * (x0 + x1 - 2.0 * low) / variance * math.exp(-2.0 * (x0 - low) * (x1 - low) / variance)

    def miss(high: float) -> float:
        return -within(x0, x1, low + 1e-30j, high, variance).imag / 1e-30 / density - uniform

    least = max(x0, x1, low + 0.35 * math.sqrt(variance))
    return brentq(miss, least, least + 9.0 * math.sqrt(variance), xtol=1e-14) if miss(least) < 0.0 else least
