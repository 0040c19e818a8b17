"""Derivatives of a price by every number of the market document, from one run of a transformed tape.

The tape says which sums it takes (`derivative_tape.py`); here a market is put to it, and what comes out becomes
derivatives: by the leaves through the adjoint of what is the same on every path, by the numbers of the document through
the Jacobian of the market's map. Scores have mean zero, so their sums are controls; coefficients come from a pilot.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from mcx.checked.contract import Contract
from mcx.checked.market import Market
from mcx.estimators.batches import Batches, Sampling
from mcx.estimators.derivative_tape import DerivativeTape, pairs_of
from mcx.estimators.estimate import Estimate
from mcx.leaves.grouped import grouped
from mcx.leaves.jacobian import inputs, jacobian
from mcx.leaves.market_map import MarketMap
from mcx.machine.draw_plan import PLAIN, DrawPlan
from mcx.machine.sizes import cost
from mcx.tape.adjoint import leaf_sums
from mcx.tape.program import LeafKind, Program
from mcx.tape.registers import lower

CONTROLS = 6  # of a second derivative: two scores, the second-order one, that of its delta, both deltas' difference,
# and the difference of both second derivatives of a stand-in


@dataclass(frozen=True, slots=True)
class Coefficients:
    """Of the controls: first (numbers, 2), second (pairs, CONTROLS)."""

    first: np.ndarray
    second: np.ndarray


@dataclass(frozen=True, slots=True)
class Derivatives:
    """What one run finds, by parts of the run, without the controls and the controls beside it.

    first (parts, numbers) and its controls (parts, numbers, 2): by the inputs in their order; second (parts, pairs) and
    its controls (parts, pairs, CONTROLS): by the pairs of spots, each asset with itself first; the price of the same
    paths, by parts (the only quantity of `base`) and as a whole.
    """

    first: np.ndarray
    control: np.ndarray
    second: np.ndarray
    controls: np.ndarray
    base: Batches
    price: Estimate

    def fitted(self) -> Coefficients:
        """Coefficients that leave the smallest variance on these paths."""
        first = np.array([_fit(self.first[:, k], self.control[:, k]) for k in range(self.first.shape[1])])
        second = np.array([_fit(self.second[:, k], self.controls[:, k]) for k in range(self.second.shape[1])])
        return Coefficients(first, second.reshape(self.controls.shape[1:]))

    def with_controls(self, coefficients: Coefficients) -> tuple[Batches, Batches]:
        """First and second derivatives, as quantities by parts of the run."""
        first = self.first - np.einsum("bnc,nc->bn", self.control, coefficients.first)
        second = self.second - np.einsum("bpc,pc->bp", self.controls, coefficients.second)
        return self.base.others(first), self.base.others(second)


def _fit(values: np.ndarray, controls: np.ndarray) -> np.ndarray:
    """Least squares about the means; 0 for a control that is always 0."""
    return np.linalg.lstsq(controls - controls.mean(axis=0), values - values.mean(), rcond=1e-10)[0]


@dataclass(frozen=True, slots=True)
class Differentiator:
    """A derivative tape on one market, ready to run."""

    made: DerivativeTape
    market: Market
    contract: Contract
    values: np.ndarray
    program: Program
    by_number: np.ndarray

    @staticmethod
    def on(made: DerivativeTape, market: Market, contract: Contract) -> Differentiator:
        leaves = made.tape.leaves
        values = MarketMap(market, contract).values(grouped(leaves))
        return Differentiator(made, market, contract, values, lower(made.tape, values),
                              jacobian(market, contract, leaves))

    def cost(self, plan: DrawPlan = PLAIN) -> float:
        """Of one path, by the fixed table of the machine."""
        return cost(self.program, plan)

    def derivatives(self, sampling: Sampling) -> Derivatives:
        """One run. Raises what `Sampling.sums` raises."""
        sums, price = sampling.sums(self.program)
        made = self.made
        first, score, by_score, by_path = (
            leaf_sums(made.tape, self.values, sums.means, chosen) @ self.by_number
            for chosen in (made.derived, made.controls, made.by_score, made.by_path))
        second, controls = self._second(sums.means, first, score)
        control = np.stack([score, by_score - by_path], axis=-1)
        return Derivatives(first, control, second, controls, sums.last(), price)

    def _second(self, sums: np.ndarray, first: np.ndarray, control: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Second derivatives by the spots out of those by their logs, and the controls of them. The log is that of the
        spot without the cash dividends that are escrowed, which stay where they are when the spot moves."""
        made, numbers = self.made, inputs(self.market, self.contract)
        logs = {leaf.asset: value for leaf, value in zip(made.tape.leaves, self.values, strict=True)
                if leaf.kind is LeafKind.LOG_SPOT}
        spots = [column for column, number in enumerate(numbers) if number.kind == "spot"]
        second = np.zeros((len(sums), len(made.crossed)))
        controls = np.zeros((*second.shape, CONTROLS))
        for pair, (one, other) in enumerate(pairs_of(len(spots))[: len(made.crossed)]):
            levels = [math.exp(logs[k]) if k in logs else numbers[spots[k]].value for k in (one, other)]
            for side, parts in enumerate(made.crossed[pair]):
                second[:, pair] += 0.5 * sums[:, parts[0::2]].sum(axis=1)
                controls[:, pair, side] = sums[:, parts[1::2]].sum(axis=1)
            if made.curved[pair]:
                bent, score, *openly = made.curved[pair]
                second[:, pair] += sums[:, [bent, *openly]].sum(axis=1)
                controls[:, pair, 2] = sums[:, score]
            if one == other:
                second[:, pair] -= levels[0] * first[:, spots[one]]
                controls[:, pair, 3] = levels[0] * control[:, spots[one]]
                if one in made.tied:
                    by_score, delta = made.tied[one]
                    controls[:, pair, 4] = sums[:, by_score[0::2]].sum(axis=1) - sums[:, delta]
            if made.stood[pair]:
                (bent,), *both = made.stood[pair]
                controls[:, pair, 5] = sums[:, bent] - 0.5 * sum(sums[:, parts[0::2]].sum(axis=1) for parts in both)
            second[:, pair] /= levels[0] * levels[1]
            controls[:, pair] /= levels[0] * levels[1]
        return second, controls
