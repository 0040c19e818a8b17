"""A worst-of autocall that has begun, the fixings of its past, and what is wrong with a text."""

from __future__ import annotations

from pathlib import Path

import pytest
from front_door import written

import mcx as package
from mcx.faults import InputError

SEED = 20261201
WORST_OF = """contract: note
currency: EUR
notional: 1000
assets: [harbour, lantern]
start: 2026-12-01
day_count: 30/360
settlement: 2 business days
calendar: {holidays: none, roll: following}
payoff: autocall
terms:
  initial: {harbour: 100, lantern: 50}
  observations: {from: 2027-03-01, until: 2028-12-01, every: 3 months}
  first_call: 2027-06-01
  call_barrier: 100%
  coupon_barrier: 80%
  coupon: 2%
  memory: true
  knock_in: 60%
  watched: observations.last
  strike: 100%
---
"""
MARKET = """market: TODAY
rates: {EUR: 2%}
funding: {EUR: 1%}
assets:
  harbour: {spot: 92, currency: EUR, yield: 1%, vol: 20%}
  lantern: {spot: 47, currency: EUR, yield: 2%, vol: 25%}
correlation: {harbour/lantern: 50%}
"""
LEVELS = {("harbour", "2027-03-01"): 97.5, ("harbour", "2027-06-01"): 96.0, ("harbour", "2027-09-01"): 94.25,
          ("lantern", "2027-03-01"): 48.5, ("lantern", "2027-06-01"): 38.25, ("lantern", "2027-09-01"): 44.0}


def market(today: str = "2027-09-15") -> str:
    return MARKET.replace("TODAY", today)


def fixings(levels: dict[tuple[str, str], float]) -> str:
    """The levels as a part of the market document."""
    lines = [f"  {name}: {{{', '.join(f'{day}: {level}' for (asset, day), level in levels.items() if asset == name)}}}"
             for name in dict.fromkeys(asset for asset, _ in levels)]
    return "fixings:\n" + "\n".join(lines) + "\n" if levels else ""


def faults(folder: Path, text: str) -> list[str]:
    """What is wrong, without the file's name."""
    file = written(folder, text)
    with pytest.raises(InputError) as caught:
        package.price(file, paths=64)
    return [str(fault).removeprefix(f"{file}:") for fault in caught.value.faults]
