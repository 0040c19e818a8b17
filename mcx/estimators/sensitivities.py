"""The sensitivities of a contract in the units of the trade, each a linear combination of derivatives by market
numbers.

delta per 1 of spot, and for a move of 1 % as percent of the notional; vega and correlation per point (1 %); rho, yield
and funding per basis point of a zero rate; forwards per 1; dividends per 1 of cash or per basis point of the level, a
decrement per basis point or point a year; a rate of exchange per 1, its vol and correlations per point. Everything but
the second delta is in the contract's currency for the whole notional or number of units. Where a curve has several
nodes there is one line for each and one for all of them together, whose value is their sum. Gamma is the change of
delta (per 1 of spot) for a move of the spot by 1 %.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from itertools import combinations, groupby

import numpy as np

from mcx.checked.contract import Contract
from mcx.leaves.jacobian import Input

ALL = "all"  # the tenor of a parallel move
POINT, BASIS_POINT = 1e-2, 1e-4
NAMES = {"spot": "delta", "vol": "vega", "rate": "rho", "yield": "yield", "funding": "funding", "forward": "forward",
         "correlation": "correlation", "dividend": "dividend", "dividend share": "dividend share",
         "decrement": "decrement", "decrement points": "decrement", "fx spot": "fx delta", "fx vol": "fx vega",
         "fx correlation": "fx correlation"}
UNITS = {"vol": (POINT, "per vol point"), "rate": (BASIS_POINT, "per bp"), "yield": (BASIS_POINT, "per bp"),
         "funding": (BASIS_POINT, "per bp"), "forward": (1.0, "per 1 of forward"), "correlation": (POINT, "per point"),
         "dividend": (1.0, "per 1 of cash"), "dividend share": (BASIS_POINT, "per bp"),
         "decrement": (BASIS_POINT, "per bp"),
         "decrement points": (1.0, "per point a year"), "fx spot": (1.0, "per 1 of the rate"),
         "fx vol": (POINT, "per vol point"), "fx correlation": (POINT, "per point")}


@dataclass(frozen=True, slots=True)
class Sensitivity:
    """What is asked for. `subject` is the asset, the pair or the currency; `tenor` the node, ALL for a whole curve, ''
    for a flat number. The value is the sum of `factors` times the derivatives of the price (in its own unit) by the
    numbers at `columns` among the contract's inputs."""

    name: str
    subject: str
    tenor: str
    unit: str
    columns: tuple[int, ...]
    factors: tuple[float, ...]

    def weights(self, size: int) -> np.ndarray:
        """The factors among all inputs, shape (size,)."""
        found = np.zeros(size)
        found[list(self.columns)] = self.factors
        return found


@dataclass(frozen=True, slots=True)
class Curvature:
    """A gamma, or a cross gamma of two assets: `factor` times the second derivative by the spots at `columns`; `assets`
    are their numbers in the contract."""

    name: str
    subject: str
    unit: str
    columns: tuple[int, int]
    assets: tuple[int, int]
    factor: float


def first_order(numbers: Sequence[Input], contract: Contract) -> Iterator[Sensitivity]:
    """Every first-order sensitivity, in the order of the inputs."""
    at = {number: column for column, number in enumerate(numbers)}
    for (kind, subject), found in groupby(numbers, key=lambda number: (number.kind, number.subject)):
        nodes = list(found)
        if kind == "spot":
            yield from _deltas(nodes[0], at[nodes[0]], contract)
            continue
        step, words = UNITS[kind]
        factor, unit = step * contract.size, f"{contract.currency} {words}"
        for node in nodes:
            yield Sensitivity(NAMES[kind], subject, node.tenor, unit, (at[node],), (factor,))
        if len(nodes) > 1 and kind != "forward":
            columns = tuple(at[node] for node in nodes)
            yield Sensitivity(NAMES[kind], subject, ALL, unit, columns, (factor,) * len(nodes))


def _deltas(spot: Input, column: int, contract: Contract) -> Iterator[Sensitivity]:
    currency, name = contract.currency, spot.subject
    yield Sensitivity("delta", name, "", f"{currency} per 1 of spot", (column,), (contract.size,))
    if contract.notional is not None:
        yield Sensitivity("delta for 1 %", name, "", "% of notional", (column,), (spot.value,))  # 0.01 to percent: 1
    else:
        yield Sensitivity("delta for 1 %", name, "", currency, (column,), (0.01 * spot.value * contract.size,))


def second_order(numbers: Sequence[Input], contract: Contract) -> Iterator[Curvature]:
    """The gamma of every asset and the cross gamma of every two: the first one's delta as the second's spot moves."""
    spots = [(column, number) for column, number in enumerate(numbers) if number.kind == "spot"]
    unit = f"{contract.currency} per 1 of spot, for 1 %"
    for asset, (column, number) in enumerate(spots):
        factor = 0.01 * number.value * contract.size
        yield Curvature("gamma", number.subject, unit, (column, column), (asset, asset), factor)
    for first, second in combinations(range(len(spots)), 2):
        (column, one), (row, other) = spots[first], spots[second]
        factor = 0.01 * other.value * contract.size
        yield Curvature("cross gamma", f"{one.subject}/{other.subject}", unit, (column, row), (first, second), factor)
