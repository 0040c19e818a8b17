"""The reference's own market mathematics: curves, variances, factors and bridges from a checked `Market`.

Rates interpolate linearly in time times rate (log-linearly in discount factors) and go on at the last forward rate;
total variance interpolates linearly and goes on at the last vol. Nothing here is shared with `mcx/leaves`.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from datetime import timedelta

from mcx.checked.contract import Contract
from mcx.checked.market import Curve, Market

YEARS = {
    "Actual/360": lambda start, end: (end - start).days / 360,
    "30/360": lambda start, end: (360 * (end.year - start.year) + 30 * (end.month - start.month) - min(start.day, 30)
                                  + (30 if end.day == 31 and start.day >= 30 else end.day)) / 360,
}  # the day counts of curves that examples use
ROUNDING = 1e-12  # of a variance: what is left of it after the other assets is then no randomness of its own


@dataclass(frozen=True)
class StepNumbers:
    """What moves the assets between two dates: drift and variance of each log, and the lower triangular factor."""

    drifts: tuple[float, ...]
    variances: tuple[float, ...]
    factor: tuple[tuple[float, ...], ...]


class PlainMarket:
    """Rates, yields and vols of a checked market for one contract; times in years from the valuation date.

    `last` is when the contract last observes: cash dividends up to then are escrowed. Assets have the numbers that the
    contract gives them; rates of exchange that are simulated come after them, in the order in which assets need them.
    """

    def __init__(self, market: Market, contract: Contract, last: float):
        self.currency = contract.currency
        self.market = market
        self.last = last
        self.assets = [market.assets[name] for name in contract.assets]
        self.known: dict[int, list[tuple[float, float, float]]] = {}  # dividends, worked out once
        self.worth: dict[int, list[tuple[float, float]]] = {}  # today's values of the escrowed ones
        self.how = [contract.conversion.get(name, "") for name in contract.assets]
        foreign = [asset.currency for asset, how in zip(self.assets, self.how, strict=True) if how == "composite"]
        self.foreign = list(dict.fromkeys(foreign))
        self.nodes = self.times_of_change()

    def row_of_rate(self, asset: int) -> int | None:
        """The number of the rate of exchange that an asset is converted at."""
        if self.how[asset] != "composite":
            return None
        return len(self.assets) + self.foreign.index(self.assets[asset].currency)

    def rate(self, row: int):
        """The market's rate of exchange and whether it is quoted in the contract's currency."""
        currency = self.foreign[row - len(self.assets)]
        (found,) = [one for one in self.market.fx.values() if {*one.per} == {currency, self.currency}]
        return found, found.per[0] == self.currency

    def start(self, row: int) -> float:
        """Where the lognormal part of an asset, or a rate of exchange, begins."""
        if row < len(self.assets):
            return self.assets[row].spot.value - sum(
                cash * math.exp(-self.growth(row, when)) for when, cash in self.cash(row))
        found, straight = self.rate(row)
        return found.spot.value if straight else 1 / found.spot.value

    def dividends(self, asset: int) -> list[tuple[float, float, float]]:
        if asset not in self.known:
            self.known[asset] = self.all_dividends(asset)
        return self.known[asset]

    def all_dividends(self, asset: int) -> list[tuple[float, float, float]]:
        """Ex date, cash and share of every dividend to come; a blend is resolved at the forward just before."""
        one = self.assets[asset]
        if one.decrement and one.decrement.points:
            count = int(self.last * 365 + 1e-6)
            return [((k + 1) / 365, one.decrement.quoted.value / 365, 0.0) for k in range(count)]
        found, level, before = [], one.spot.value, 0.0
        for dividend in one.dividends:
            if dividend.time <= 0:
                continue
            level *= math.exp(self.growth_before_dividends(asset, dividend.time)
                              - self.growth_before_dividends(asset, before))
            cash = dividend.cash.value if dividend.cash else 0.0
            share = dividend.share.value if dividend.share else 0.0
            if one.blend:
                length = one.blend.share_from - one.blend.cash_until
                weight = min(max((one.blend.share_from - dividend.time) / length, 0.0), 1.0)
                share, cash = share + (1 - weight) * cash / level, weight * cash
            found.append((dividend.time, cash, share))
            level, before = level * (1 - share) - cash, dividend.time
        return found

    def cash(self, asset: int) -> list[tuple[float, float]]:
        """Ex dates and amounts of the cash dividends that are escrowed."""
        return [(when, cash) for when, cash, _ in self.dividends(asset) if cash and when <= self.last + 1e-9]

    def escrow(self, asset: int, time: float, before: bool = False) -> float:
        """What the cash dividends to come are worth at a time; with `before` just before the dividend of that time."""
        here = self.growth(asset, time) - (self.jump(asset, time) if before else 0.0)
        edge = time - 1e-9 if before else time + 1e-9
        if asset not in self.worth:
            self.worth[asset] = [(when, cash * math.exp(-self.growth(asset, when))) for when, cash in self.cash(asset)]
        return math.exp(here) * sum(value for when, value in self.worth[asset] if when > edge)

    def jump(self, asset: int, time: float) -> float:
        """log of what a share dividend of this very time leaves."""
        return sum(math.log(1 - share) for when, _, share in self.dividends(asset) if abs(when - time) < 1e-9)

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
        how = curve.convention

        def years(t: float) -> float:
            if how.since is None or how.day_count == "Actual/365 (Fixed)":
                return t
            return YEARS[how.day_count](how.since, how.since + timedelta(days=round(365 * t)))

        held = {"continuous": lambda t, rate: rate * years(t),
                "annual": lambda t, rate: years(t) * math.log(1 + rate),
                "simple": lambda t, rate: math.log(1 + rate * years(t))}
        return self.line(curve, time, held[how.compounding])

    def growth(self, asset: int, time: float) -> float:
        """log of forward over spot, with share dividends and without cash, in the asset's currency."""
        shares = [math.log(1 - share) for when, _, share in self.dividends(asset) if share and when <= time + 1e-9]
        return self.growth_before_dividends(asset, time) + sum(shares)

    def paid_growth(self, row: int, time: float) -> float:
        """The same under the contract's currency's measure; of a rate of exchange by both currencies' rates."""
        if row >= len(self.assets):
            foreign = self.market.rates[self.foreign[row - len(self.assets)]]
            return self.accrued(self.market.rates[self.currency], time) - self.accrued(foreign, time)
        if self.how[row] == "quanto":
            quanto = self.assets[row].quanto
            sign = 1 if quanto.per[0] == self.currency else -1
            together = sign * quanto.fx_correlation.value * self.both_vols(self.assets[row].vol, quanto.fx_vol, 0, time)
        else:
            rate = self.row_of_rate(row)
            together = 0.0 if rate is None else self.covariance(row, rate, 0.0, time)
        return self.growth(row, time) - together

    def growth_before_dividends(self, asset: int, time: float) -> float:
        one = self.assets[asset]
        if one.forwards is not None:
            return self.line(one.forwards, time, lambda t, forward: math.log(forward / one.spot.value))
        gained = self.accrued(self.market.rates[one.currency or self.currency], time)
        lost = self.accrued(one.dividend_yield, time) if one.dividend_yield else 0.0
        if one.decrement and not one.decrement.points:
            lost += one.decrement.quoted.value * time
        return gained - lost

    def vol(self, row: int) -> Curve:
        return self.assets[row].vol if row < len(self.assets) else self.rate(row)[0].vol

    def total(self, vol: Curve, time: float) -> float:
        """Total variance of the log to `time`."""
        return self.line(vol, time, lambda t, vol: vol * vol * t, flat=True)

    def both_vols(self, one: Curve, other: Curve, start: float, end: float) -> float:
        """The integral of both vols, piece by piece between the nodes."""
        cuts = [start, *(t for t in self.nodes if start < t < end), end]
        total = 0.0
        for t0, t1 in zip(cuts, cuts[1:], strict=False):
            gains = [max(self.total(vol, t1) - self.total(vol, t0), 0.0) for vol in (one, other)]
            total += math.sqrt(gains[0] * gains[1])
        return total

    def discount(self, time: float) -> float:
        """Funded discount factor of the contract's currency."""
        spread = self.market.funding.get(self.currency)
        held = self.accrued(self.market.rates[self.currency], time)
        return math.exp(-held - (self.accrued(spread, time) if spread else 0.0))

    def correlation(self, one: int, other: int) -> float:
        if one == other:
            return 1.0
        names, sign = [], 1
        for row in (one, other):
            if row < len(self.assets):
                names.append(self.assets[row].name)
            else:
                rate, straight = self.rate(row)
                names.append(rate.name)
                sign *= 1 if straight else -1
        stated = self.market.correlation.get(tuple(names)) or self.market.correlation[tuple(names[::-1])]
        return sign * stated.value

    def times_of_change(self) -> list[float]:
        """Times at which a rate, yield or vol of the contract's assets may change."""
        curves: list[Curve | None] = []
        times = set()
        for number, asset in enumerate(self.assets):
            curves += [asset.vol, asset.dividend_yield, asset.forwards]
            curves += [self.market.rates.get(asset.currency or self.currency)]
            curves += [asset.quanto.fx_vol] if self.how[number] == "quanto" else []
            times |= set() if asset.decrement else {when for when, cash, share in self.dividends(number)
                                                    if share or when <= self.last + 1e-9}
        for row in range(len(self.foreign)):
            curves += [self.rate(len(self.assets) + row)[0].vol, self.market.rates[self.currency]]
        return sorted(times | {node.time for curve in curves if curve for node in curve.nodes if node.time > 0})

    def covariance(self, one: int, other: int, start: float, end: float) -> float:
        """Correlation times the integral of both vols."""
        return self.correlation(one, other) * self.both_vols(self.vol(one), self.vol(other), start, end)

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
        drifts = tuple(self.paid_growth(one, end) - self.paid_growth(one, start) - variance / 2
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
