"""What dividends do to a level: shares by which it falls, and cash that is escrowed.

A dividend that is a share of the level multiplies it at its ex date and belongs to the asset's growth. Cash is
escrowed: today's value of the cash dividends whose ex dates fall up to the contract's last observation, discounted at
the asset's own growth, is taken out of the spot; what is left is lognormal with the asset's vol, and the level is that
plus the value of the dividends still to come. Forwards do not depend on where the last observation lies.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from itertools import accumulate

import numpy as np

from mcx.checked.market import AssetMarket, Blend

SAME_TIME = 1e-9  # years, as in the tape's grid
DAYS = 365  # a decrement in points is taken each calendar day


@dataclass(frozen=True, slots=True)
class Payouts:
    """Dividends with ex dates after today: `share_logs[k]` is the log of what a share leaves at `share_times[k]`;
    `cash[k]` is paid at `cash_times[k]`. Times in years, in order."""

    share_times: tuple[float, ...] = ()
    share_logs: tuple[float, ...] = ()
    cash_times: tuple[float, ...] = ()
    cash: tuple[float, ...] = ()

    def shares_to(self, time: float | np.ndarray) -> np.number | np.ndarray:
        """The log of what all shares up to a time leave, that of the day included."""
        return self._first(np.searchsorted(self.share_times, time + SAME_TIME, side="right"))

    def shares_at(self, time: float | np.ndarray) -> np.number | np.ndarray:
        """The log of what the share of this very time leaves."""
        return self.shares_to(time) - self._first(np.searchsorted(self.share_times, time - SAME_TIME))

    def _first(self, count: np.integer | np.ndarray) -> np.number | np.ndarray:
        return np.concatenate(([0.0], np.cumsum(self.share_logs)))[count]


def pays_cash(asset: AssetMarket) -> bool:
    """Whether the asset has cash dividends after today, so that the contract's last observation matters."""
    return (asset.decrement is not None and asset.decrement.points) or any(
        each.cash and each.time > SAME_TIME for each in asset.dividends)


def payouts(asset: AssetMarket, growth: Callable[[float], float], last: float) -> Payouts:
    """The dividends of an asset after today; cash only up to `last`, the time of the last observation.

    `growth` is the log of the forward over the spot before dividends. Where a blend makes shares of cash, forwards stay
    what they are with cash alone.
    """
    if asset.decrement is not None and asset.decrement.points:
        days = range(1, math.floor(last * DAYS + 1e-6) + 1)
        return Payouts(cash_times=tuple(day / DAYS for day in days),
                       cash=(asset.decrement.quoted.value / DAYS,) * len(days))
    shares: list[tuple[float, float]] = []
    cash: list[tuple[float, float]] = []
    forward, before = asset.spot.value, 0.0
    for dividend in asset.dividends:
        when = dividend.time
        if when <= SAME_TIME:  # the spot is ex this one
            continue
        forward, before = forward * np.exp(growth(when) - growth(before)), when
        paid = dividend.cash.value if dividend.cash else 0.0
        kept = paid * _cash_part(asset.blend, when)
        share = (dividend.share.value if dividend.share else 0.0) + (paid - kept) / forward
        if np.real(share) >= 1.0 or np.real(forward) <= 0.0:  # more than there is: the fault of the whole list
            kept, share = paid, 0.0
        if np.real(share) > 0.0:
            shares.append((when, np.log1p(-share)))
        if np.real(kept) > 0.0 and when <= last + SAME_TIME:
            cash.append((when, kept))
        forward = forward * (1.0 - share) - kept
    return Payouts(*_columns(shares), *_columns(cash))


def _cash_part(blend: Blend | None, time: float) -> float:
    """How much of a cash dividend stays cash."""
    if blend is None or time <= blend.cash_until:
        return 1.0
    return max(blend.share_from - time, 0.0) / (blend.share_from - blend.cash_until)


def _columns(rows: Iterable[tuple[float, float]]) -> tuple[tuple[float, ...], tuple[float, ...]]:
    rows = tuple(rows)
    return tuple(row[0] for row in rows), tuple(row[1] for row in rows)


@dataclass(frozen=True, slots=True)
class Escrow:
    """Cash dividends by their values today: `later[k]` is today's value of all from `times[k]` on."""

    times: tuple[float, ...] = ()
    later: tuple[float, ...] = ()

    @staticmethod
    def of(payouts: Payouts, growth: Callable[[float], float]) -> Escrow:
        """The escrow for the asset's own growth, shares included."""
        values = [cash * np.exp(-growth(when))
                  for when, cash in zip(payouts.cash_times, payouts.cash, strict=True)]
        return Escrow(payouts.cash_times, tuple(accumulate(reversed(values)))[::-1])

    def after(self, time: float | np.ndarray) -> np.number | np.ndarray:
        """Today's value of the dividends whose ex dates lie after a time."""
        return self._from(np.searchsorted(self.times, time + SAME_TIME, side="right"))

    def at_or_after(self, time: float | np.ndarray) -> np.number | np.ndarray:
        """The same with a dividend of the day."""
        return self._from(np.searchsorted(self.times, time - SAME_TIME))

    def _from(self, number: np.integer | np.ndarray) -> np.number | np.ndarray:
        return np.append(self.later, 0.0)[number]
