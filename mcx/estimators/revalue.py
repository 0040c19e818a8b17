"""Revaluation with common random numbers: one contract's price on the same paths under other markets and other days."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from mcx.checked.contract import Contract
from mcx.checked.conversions import simulated_rates
from mcx.checked.market import Market
from mcx.estimators.batches import Batches, Sampling, joined
from mcx.estimators.estimate import Estimate
from mcx.estimators.reduction.antithetic import paired
from mcx.leaves.correlation import correlation_matrix
from mcx.leaves.grouped import Grouped, grouped
from mcx.leaves.jacobian import Input, moved
from mcx.leaves.market_map import MarketMap
from mcx.tape.passes import drop_dead_code
from mcx.tape.program import Leaf, LeafKind, Sum, Tape
from mcx.tape.registers import lower

IN_PROPORTION = ("spot", "forward", "fx spot", "dividend", "decrement points")
RATES = ("rate", "yield", "funding", "dividend share", "decrement")  # moved by a tenth of what vols are moved by
ROUNDING = 1e-12


@dataclass(frozen=True, slots=True)
class Revaluer:
    """The price of a contract's tape under any market. `leaves` are those of the tape, as the market is asked for them:
    seen from the valuation date, or from a later day."""

    tape: Tape
    contract: Contract
    leaves: Grouped

    @staticmethod
    def of(tape: Tape, contract: Contract, later: float = 0.0, pairs: bool = False) -> Revaluer:
        """`tape` has the price as its first output; `later`: years after the valuation date; `pairs`: each path beside
        its mirror image."""
        price = tape.outputs[0]
        alone = drop_dead_code(replace(tape, outputs=(price,), sums=(Sum(price.value),)))
        alone = paired(alone) if pairs else alone
        return Revaluer(alone, contract, grouped(seen_from(alone.leaves, later)))

    def price(self, market: Market, sampling: Sampling) -> tuple[Batches, Estimate]:
        """The price in its own unit, by parts of the run and as a whole. Raises KeyboardInterrupt after an
        interruption: part of a run can be compared with nothing."""
        found = sampling.sums(lower(self.tape, MarketMap(market, self.contract).values(self.leaves)))
        if found[1].paths < sampling.paths:
            raise KeyboardInterrupt
        return found

    def by_parts(self, market: Market, sampling: Sampling) -> np.ndarray:
        """The price by parts of the run, shape (64, 1)."""
        return self.price(market, sampling)[0].means


def seen_from(leaves: Iterable[Leaf], later: float) -> list[Leaf]:
    """The leaves with every time that much nearer: what lies between is now, at today's level."""
    return [leaf if leaf.kind is LeafKind.TERM else
            replace(leaf, start=max(leaf.start - later, 0.0), end=max(leaf.end - later, 0.0),
                    last=max(leaf.last - later, 0.0)) for leaf in leaves]


def step_of(number: Input, size: float) -> float:
    """How far a number is moved by a bump of this size: spots, forwards, rates of exchange and cash dividends by
    that share of themselves, vols and correlations by the size itself, rates, yields and spreads by a tenth of it."""
    if number.kind in IN_PROPORTION:
        return size * number.value
    return size / 10.0 if number.kind in RATES else size


def impossible(market: Market, contract: Contract, shifts: Mapping[Input, float]) -> str:
    """Why there is no such market; '' where there is one."""
    there = moved(market, shifts)
    for name in contract.assets:
        asset = there.assets[name]
        numbers = [asset.spot, *(node.quoted for node in asset.forwards.nodes)] if asset.forwards else [asset.spot]
        if min(number.value for number in numbers) <= 0.0:
            return f"the level of {name} would not be above 0"
        variances = [node.quoted.value**2 * node.time for node in asset.vol.nodes]
        if min(node.quoted.value for node in asset.vol.nodes) <= 0.0:
            return f"a vol of {name} would not be above 0"
        if any(total < held * (1.0 - ROUNDING) for held, total in zip(variances, variances[1:], strict=False)):
            return f"the total variance of {name} would fall from one node to the next"
    names = (*contract.assets, *simulated_rates(contract.conversion, contract.currency, there))
    matrix = correlation_matrix(there.correlation, names)
    if np.abs(matrix).max() > 1.0 or np.linalg.eigvalsh(matrix)[0] < -ROUNDING * len(matrix):
        return "the correlations would not belong to any joint law"
    return ""


def central_differences(
    revaluer: Revaluer, market: Market, steps: Mapping[Input, float], sampling: Sampling
) -> Batches:
    """The derivatives by every number given, each moved by its step up and down on the same paths: biased by what is of
    the step's square, and where the payoff jumps with an error that grows as steps shrink (Glasserman 2003, 7.1)."""
    found = []
    for number, step in steps.items():
        up, down = (revaluer.price(moved(market, {number: side * step}), sampling)[0] for side in (1.0, -1.0))
        found.append(up.less(down).through(np.array([[0.5 / step]])))
    return joined(found)


def second_differences(
    revaluer: Revaluer, market: Market, pairs: Sequence[tuple[Input, Input]], size: float, sampling: Sampling,
    base: Batches,
) -> Batches:
    """The second derivatives by the two spots of each pair, on the same paths; `base` is the price as it stands."""
    known: dict[tuple[tuple[Input, float], ...], np.ndarray] = {}

    def at(*shifts: tuple[Input, float]) -> np.ndarray:
        if shifts not in known:
            known[shifts] = revaluer.by_parts(moved(market, dict(shifts)), sampling)
        return known[shifts]

    found = []
    for one, other in pairs:
        h, k = step_of(one, size), step_of(other, size)
        if one == other:
            bent, size_of_step = at((one, h)) - 2.0 * base.means + at((one, -h)), h**2
        else:
            corners = (math.copysign(1.0, a * b) * at((one, a), (other, b)) for a in (h, -h) for b in (k, -k))
            bent, size_of_step = sum(corners), 4.0 * h * k
        found.append(replace(base, means=bent).through(np.array([[1.0 / size_of_step]])))
    return joined(found)
