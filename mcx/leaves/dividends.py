"""What dividends do to a level: shares by which it falls, and cash that is escrowed.

A dividend that is a share of the level multiplies it at its ex date and belongs to the asset's growth. Cash is
escrowed: today's value of the cash dividends whose ex dates fall up to the contract's last observation, discounted at
the asset's own growth, is taken out of the spot; what is left is lognormal with the asset's vol, and the level is that
plus the value of the dividends still to come. Forwards do not depend on where the last observation lies.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass

import numpy as np

from mcx.checked.market import AssetMarket, Blend

SAME_TIME = 1e-9  # years, as in the tape's grid
MOST_YEARS = 50  # of a decrement in points, where the last observation is not known
DAYS = 365  # a decrement in points is taken each calendar day


@dataclass(frozen=True, slots=True)
class Payouts:
    """Dividends with ex dates after today, times in years, in order.

    `share_logs[k]` is the log of what a share leaves at `share_times[k]`; `worth[k]` is today's value of the cash that
    is paid at `cash_times[k]`, discounted at the asset's own growth.
    """

    share_times: tuple[float, ...] = ()
    share_logs: tuple[float, ...] = ()
    cash_times: tuple[float, ...] = ()
    worth: tuple[float, ...] = ()

    def shares_to(self, time: float | np.ndarray) -> np.number | np.ndarray:
        """The log of what all shares up to a time leave, that of the day included."""
        return _first(self.share_logs, np.searchsorted(self.share_times, time + SAME_TIME, side="right"))

    def shares_at(self, time: float | np.ndarray) -> np.number | np.ndarray:
        """The log of what the share of this very time leaves."""
        return self.shares_to(time) - _first(self.share_logs, np.searchsorted(self.share_times, time - SAME_TIME))

    def cash_to(self, time: float | np.ndarray) -> np.number | np.ndarray:
        """Today's value of the cash paid up to a time, that of the day included."""
        return _first(self.worth, np.searchsorted(self.cash_times, time + SAME_TIME, side="right"))

    def cash_before(self, time: float | np.ndarray) -> np.number | np.ndarray:
        """The same without that of the day."""
        return _first(self.worth, np.searchsorted(self.cash_times, time - SAME_TIME))


def pays_cash(asset: AssetMarket) -> bool:
    """Whether the asset has cash dividends after today, so that the contract's last observation matters."""
    return (asset.decrement is not None and asset.decrement.points) or any(
        each.cash and each.time > SAME_TIME for each in asset.dividends)


def payouts(asset: AssetMarket, growth: Callable[[float | np.ndarray], np.ndarray], last: float | None) -> Payouts:
    """The dividends of an asset after today; of a decrement in points up to `last` (None: as long as contracts live).

    `growth` is the log of the forward over the spot before dividends. Where a blend makes shares of cash, forwards stay
    what they are with cash alone.
    """
    if asset.decrement is not None and asset.decrement.points:
        days = np.arange(1, math.floor((MOST_YEARS if last is None else last) * DAYS + 1e-6) + 1) / DAYS
        paid = asset.decrement.quoted.value / DAYS
        return Payouts(cash_times=tuple(days), worth=tuple(paid * np.exp(-growth(days))))
    shares: list[tuple[float, float]] = []
    cash: list[tuple[float, float]] = []
    forward, before, left = asset.spot.value, 0.0, 0.0
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
            left = left + np.log1p(-share)
            shares.append((when, np.log1p(-share)))
        if np.real(kept) > 0.0:
            cash.append((when, kept * np.exp(-growth(when) - left)))
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


def _first(values: Sequence[float], count: np.integer | np.ndarray) -> np.number | np.ndarray:
    """The sum of the first `count` values."""
    return np.concatenate(([0.0], np.cumsum(values)))[count]
