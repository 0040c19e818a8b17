"""Derivatives of a price by every number of the market document, from one run of a transformed tape.

The payments of the price are shared out: some are taken pathwise, by the adjoint of the tape (Glasserman 2003, section 7.2;
Giles & Glasserman 2006), right where a payment has no jumps; the others by likelihood ratio (section 7.3): the payment
times the score of everything that is drawn, plus the derivative through what is read openly (discount factors) with the
levels held. A payment is multiplied only by scores of steps up to the last that it depends on, since later ones have mean
zero given all that it depends on. Scores have mean zero too, so their means are controls, with coefficients from a pilot.

Second derivatives by the spots: of the pathwise part the likelihood ratio of its delta, of the other part the second-order
score. What reads the spot openly beside the levels, as the chance that a barrier is not reached in the first step does,
adds its own derivatives with the levels held.

The moments of hits share their draws, so that only the law of each by itself is known. Their scores multiply what is paid
at that moment, less the same at another moment that is given: the score's mean is zero given the levels.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from itertools import accumulate, combinations_with_replacement

import numpy as np

from mcx.checked.contract import Contract
from mcx.checked.market import Market
from mcx.estimators.batches import Batches, Sampling
from mcx.estimators.estimate import Estimate
from mcx.leaves.grouped import Grouped, grouped
from mcx.leaves.jacobian import inputs, jacobian
from mcx.leaves.market_map import MarketMap
from mcx.machine.sizes import cost
from mcx.tape.adjoint import Gradient, along, finished, leaf_sums, of_the_market, sums_of, sweep
from mcx.tape.builder import Builder
from mcx.tape.ops import Op
from mcx.tape.program import Leaf, LeafKind, Program, Sum, Tape, spot_leaf
from mcx.tape.registers import lower
from mcx.tape.scores import DRAWN, Scores, latest_steps, moment_scores, scores
from mcx.tape.steps import Grid


@dataclass(frozen=True, slots=True)
class Coefficients:
    """Of the controls: first (numbers,), second (pairs, controls)."""

    first: np.ndarray
    second: np.ndarray


@dataclass(frozen=True, slots=True)
class Derivatives:
    """What one run finds, by parts of the run, without the controls and the controls beside it.

    paths (64,); first and its control (64, numbers): by the inputs in their order; second (64, pairs) and its controls
    (64, pairs, controls): by the pairs of spots, each asset with itself first; the price of the same paths, by parts
    (64, 1) and as a whole.
    """

    paths: np.ndarray
    first: np.ndarray
    control: np.ndarray
    second: np.ndarray
    controls: np.ndarray
    base: np.ndarray
    price: Estimate

    def fitted(self) -> Coefficients:
        """Coefficients that leave the smallest variance on these paths."""
        first = np.array([_fit(self.first[:, k], self.control[:, k : k + 1])[0] for k in range(self.first.shape[1])])
        second = np.array([_fit(self.second[:, k], self.controls[:, k]) for k in range(self.second.shape[1])])
        return Coefficients(first, second.reshape(self.controls.shape[1:]))

    def with_controls(self, coefficients: Coefficients) -> tuple[Batches, Batches]:
        """First and second derivatives, as quantities by parts of the run."""
        first = self.first - coefficients.first * self.control
        second = self.second - np.einsum("bpc,pc->bp", self.controls, coefficients.second)
        return Batches(self.paths, first), Batches(self.paths, second)


def _fit(values: np.ndarray, controls: np.ndarray) -> np.ndarray:
    """Least squares about the means; 0 for a control that is always 0."""
    return np.linalg.lstsq(controls - controls.mean(axis=0), values - values.mean(), rcond=1e-10)[0]


def pairs_of(assets: int) -> list[tuple[int, int]]:
    """The pairs of spots that second derivatives are taken by: each asset with itself, then every two."""
    every = list(combinations_with_replacement(range(assets), 2))
    return sorted(every, key=lambda pair: (pair[0] != pair[1], pair))


@dataclass(frozen=True, slots=True)
class Differentiator:
    """A tape with the sums that give all derivatives. `derived` and `controls` say which sums are derivatives by leaves
    and which are their controls; `deltas` and `curved` are, for each pair of spots, the sums that its second derivative
    is made of, each with its control after it (of `curved` one, and then what is read openly), empty where there is none. `tied` are by asset the
    sums of both estimates of the pathwise part's delta, whose difference is a control. The last sum is the price. `rough`: the
    second-order score that they need has no finite variance; `timed`: they need that of a hit's moment."""

    tape: Tape
    contract: Contract
    leaves: Grouped
    derived: range
    controls: range
    deltas: tuple[tuple[int, ...], ...]
    curved: tuple[tuple[int, ...], ...]
    tied: dict[int, tuple[int, ...]]
    rough: bool
    timed: bool

    @staticmethod
    def of(tape: Tape, grid: Grid, contract: Contract, known: Sequence[float | None], *, pathwise: Iterable[int],
           likelihood: Iterable[int], second: bool) -> Differentiator:
        """From a tape whose only output is the price and two lists that share out its payments. `known`: the numbers of
        what is the same on every path; `second`: whether second derivatives are taken."""
        builder, pathwise, likelihood = Builder.of(tape), list(pathwise), list(likelihood)
        smooth = sweep(builder, _counted(builder, pathwise), of_the_market)
        derived, controls = list(sums_of(smooth)), []
        later = _later(builder, tape, grid, likelihood)
        law = scores(builder, tape, grid, known, max(later, default=min(1, len(grid.times) - 1)))
        running = _running(builder, tape, grid, likelihood, later)
        moments = _at_moments(builder, tape, likelihood)
        if likelihood:
            derived += sums_of(sweep(builder, _counted(builder, likelihood), of_the_market, _drawn(tape)))
            for score in law.first:
                if score.step in later:
                    leaf = builder.leaf(score.leaf)
                    derived.append(Sum(later[score.step], score.value, leaf))
                    controls.append(Sum(score.value, running[score.step], leaf))
            for edge in law.edges if 1 in later else ():
                leaf = builder.leaf(spot_leaf(tape.leaves, edge.asset))
                derived.append(Sum(replaced(builder, later[1], edge.extreme, edge.start), edge.weight, leaf))
                controls.append(Sum(edge.weight, None, leaf))
            for moment, paid in moments.items():
                for score in moment_scores(builder, tape, moment):
                    leaf = builder.leaf(score.leaf)
                    derived.append(Sum(paid, score.value, leaf))
                    controls.append(Sum(score.value, None, leaf))
        deltas, curved, extra = [], [], []
        opened = _Opened(builder, tape)
        tied: dict[int, tuple[int, ...]] = {}
        slopes = _by_log_spots(builder, tape, smooth, law.spots) if smooth and second else {}
        total = builder.fold(Op.ADD, pathwise) if pathwise else builder.constant(0.0)

        def noted(*sums: Sum) -> tuple[int, ...]:
            first = len(derived) + len(controls) + len(extra)
            extra.extend(sums)
            return tuple(range(first, first + len(sums)))

        for pair in pairs_of(len(contract.assets)) if second else ():
            crossed, score = (), ()
            if all(asset in law.spots for asset in pair):
                if smooth:
                    both = [_crossed(builder, slopes[one], other, law, opened)
                            for one, other in (pair, pair[::-1])]
                    crossed = noted(*both[0], *both[1])
                    if pair[0] == pair[1] and pair[0] not in tied:
                        tied[pair[0]] = noted(*_crossed(builder, total, pair[0], law, opened),
                                              Sum(slopes[pair[0]]))
                if 1 in later:
                    bend = law.second[pair]
                    score = noted(Sum(later[1], bend), Sum(bend), *_bent(later[1], pair, law, opened))
            deltas.append(crossed)
            curved.append(score)
        noted(Sum(tape.outputs[0].value))
        made = finished(builder, tape, (*derived, *controls, *extra))
        return Differentiator(made, contract, grouped(made.leaves), range(len(derived)),
                              range(len(derived), len(derived) + len(controls)), tuple(deltas), tuple(curved), tied,
                              bool(likelihood and law.edges), bool(moments))

    def on(self, market: Market) -> Bound:
        """The tape on a market, ready to run."""
        values = MarketMap(market, self.contract).values(self.leaves)
        return Bound(self, market, values, lower(self.tape, values), jacobian(market, self.contract, self.tape.leaves))


@dataclass(frozen=True, slots=True)
class Bound:
    """A differentiator on one market."""

    of: Differentiator
    market: Market
    values: np.ndarray
    program: Program
    by_number: np.ndarray

    def cost(self) -> float:
        """Of one path, by the fixed table of the machine."""
        return cost(self.program)

    def derivatives(self, sampling: Sampling) -> Derivatives:
        """One run. Raises what `Sampling.sums` raises."""
        sums, price = sampling.sums(self.program)
        first, control = (leaf_sums(self.of.tape, self.values, sums.means, chosen) @ self.by_number
                          for chosen in (self.of.derived, self.of.controls))
        second, controls = self._second(sums.means, first, control)
        return Derivatives(sums.paths, first, control, second, controls, sums.means[:, -1:], price)

    def _second(self, sums: np.ndarray, first: np.ndarray, control: np.ndarray
                ) -> tuple[np.ndarray, np.ndarray]:
        """Second derivatives by the spots out of those by their logs, and the controls of them."""
        deltas, numbers = self.of.deltas, inputs(self.market, self.of.contract)
        spots = [column for column, number in enumerate(numbers) if number.kind == "spot"]
        second, controls = np.zeros((len(sums), len(deltas))), np.zeros((len(sums), len(deltas), 5))
        for pair, (one, other) in enumerate(pairs_of(len(spots))[: len(deltas)]):
            level = [numbers[spots[asset]].value for asset in (one, other)]
            if deltas[pair]:
                for side, found in enumerate(np.split(sums[:, list(deltas[pair])], 2, axis=1)):
                    second[:, pair] += 0.5 * found[:, 0::2].sum(axis=1)
                    controls[:, pair, side] = found[:, 1::2].sum(axis=1)
            if self.of.curved[pair]:
                value, _, *openly = self.of.curved[pair]
                second[:, pair] += sums[:, [value, *openly]].sum(axis=1)
                controls[:, pair, 2] = sums[:, self.of.curved[pair][1]]
            if one == other:
                second[:, pair] -= level[0] * first[:, spots[one]]
                controls[:, pair, 3] = level[0] * control[:, spots[one]]
                if one in self.of.tied:
                    *by_score, delta = self.of.tied[one]
                    controls[:, pair, 4] = sums[:, by_score[0::2]].sum(axis=1) - sums[:, delta]
            second[:, pair] /= level[0] * level[1]
            controls[:, pair] /= level[0] * level[1]
        return second, controls


def _counted(builder: Builder, values: Iterable[int]) -> dict[int, int]:
    """How often each value counts, as values of the tape."""
    return {value: builder.constant(float(count)) for value, count in Counter(values).items()}


def _drawn(tape: Tape) -> set[int]:
    """What a likelihood ratio holds where it is."""
    return {number for number, step in enumerate(tape.instructions) if step.op in (Op.STEP, *DRAWN)}


class _Opened:
    """Derivatives by log spots of values on each path, with all that is drawn held."""

    def __init__(self, builder: Builder, tape: Tape):
        self.builder, self.tape, self.held = builder, tape, _drawn(tape)
        self.chances = any(step.op in (Op.BRIDGE_CLEAR, Op.BRIDGE_CORRIDOR) for step in tape.instructions)

    def by(self, value: int, asset: int) -> int | None:
        """A value of the tape; None where it is 0: nothing but chances reads a spot beside later levels."""
        if not self.chances:
            return None
        spot = spot_leaf(self.tape.leaves, asset)
        one = self.builder.constant(1.0)
        gradient = sweep(self.builder, {value: one}, lambda leaf: leaf == spot, self.held)
        found = along(self.builder, gradient, self.builder.leaf(spot))
        return None if self.builder.number(found) == 0.0 else found


def _bent(value: int, pair: tuple[int, int], law: Scores, opened: _Opened) -> list[Sum]:
    """What a value that reads the spots openly adds to its second-order likelihood ratio."""
    found = []
    for one, other in (pair, pair[::-1]):
        slope = opened.by(value, one)
        if slope is not None:
            found.append(Sum(slope, law.spots[other]))
    first = opened.by(value, pair[0])
    bend = None if first is None else opened.by(first, pair[1])
    return found if bend is None else [*found, Sum(bend)]


def _at_moments(builder: Builder, tape: Tape, payments: Iterable[int]) -> dict[int, int]:
    """For each moment of a hit what is paid at it, less the same with the hit half way through the step."""
    reads: list[frozenset[int]] = []
    for number, step in enumerate(tape.instructions):
        found = frozenset().union(*(reads[k] for k in step.operands))
        reads.append(found | {number} if step.op is Op.BRIDGE_MOMENT else found)
    paid: dict[int, int] = {}
    half = builder.constant(0.5)
    for payment, count in Counter(payments).items():
        for moment in sorted(reads[payment]):
            part = builder.emit(Op.SUB, payment, replaced(builder, payment, moment, half))
            part = builder.emit(Op.MUL, part, builder.constant(float(count)))
            paid[moment] = builder.emit(Op.ADD, paid[moment], part) if moment in paid else part
    return paid


def _crossed(builder: Builder, delta: int, asset: int, law: Scores, opened: _Opened) -> list[Sum]:
    """The likelihood ratio by an asset's log spot of a delta on each path: sums and their controls in turn."""
    move = law.spots[asset]
    found = [Sum(delta, move), Sum(move)]
    openly = opened.by(delta, asset)
    if openly is not None:
        found += [Sum(openly), Sum(builder.constant(0.0))]
    for edge in law.edges:
        if edge.asset == asset:
            found += [Sum(replaced(builder, delta, edge.extreme, edge.start), edge.weight), Sum(edge.weight)]
    return found


def replaced(builder: Builder, value: int, old: int, new: int) -> int:
    """A value of the tape as it would be with `new` in place of `old`."""
    instead = {old: new}
    for number in range(old + 1, value + 1):
        step = builder.instructions[number]
        if any(k in instead for k in step.operands):
            instead[number] = builder.emit(step.op, *(instead.get(k, k) for k in step.operands), place=step.place)
    return instead.get(value, value)


def _by_log_spots(builder: Builder, tape: Tape, gradient: Gradient, assets: Iterable[int]) -> dict[int, int]:
    """By asset the derivative by its log spot as a value on each path."""
    return {asset: along(builder, gradient, builder.leaf(spot_leaf(tape.leaves, asset))) for asset in assets}


def _later(builder: Builder, tape: Tape, grid: Grid, payments: Sequence[int]) -> dict[int, int]:
    """For each step the sum of the payments that depend on its draws or on later ones."""
    latest = latest_steps(tape, grid)
    ordered = sorted(payments, key=lambda value: -latest[value])
    if not ordered:
        return {}
    totals = list(accumulate(ordered, lambda total, value: builder.emit(Op.ADD, total, value)))
    found = {}
    for number in range(1, latest[ordered[0]] + 1):
        count = sum(latest[value] >= number for value in ordered)
        found[number] = totals[count - 1]
    return found


def _running(builder: Builder, tape: Tape, grid: Grid, payments: Sequence[int], later: Iterable[int]) -> dict[int, int | None]:
    """For each step the flag, known before it, without which none of the later payments is made; None for no such flag.

    A score times this flag still has mean zero, and is the better control: where a contract has ended nothing is paid.
    """
    latest = latest_steps(tape, grid)
    conditions = {payment: _conditions(tape, payment) for payment in payments}
    found: dict[int, int | None] = {}
    for number in later:
        due = [set(conditions[payment]) for payment in payments if latest[payment] >= number]
        common = [flag for flag in sorted(set.intersection(*due)) if latest[flag] < number]
        found[number] = builder.fold(Op.AND, common) if common else None
    return found


def _conditions(tape: Tape, payment: int) -> list[int]:
    """Flags that all must hold for a payment not to be 0."""
    step = tape.instructions[payment]
    if step.op is Op.SELECT:
        nothing = tape.instructions[step.operands[2]]
        return _conjuncts(tape, step.operands[0]) if nothing.op is Op.CONSTANT and nothing.payload == 0.0 else []
    return []


def _conjuncts(tape: Tape, flag: int) -> list[int]:
    step = tape.instructions[flag]
    return [part for k in step.operands for part in _conjuncts(tape, k)] if step.op is Op.AND else [flag]


def without_first_levels(tape: Tape) -> Tape:
    """The tape without today's level where an extreme that starts from it is joined to it: it lies beyond it anyway."""
    builder, values = Builder(), []
    leaves = {number: step.payload for number, step in enumerate(tape.instructions) if step.op is Op.LEAF}

    def starts(value: int, asset: int, joined: Op) -> bool:
        step = tape.instructions[value]
        if step.op is joined:
            return any(starts(k, asset, joined) for k in step.operands)
        if step.op is Op.EXP:
            return starts(step.operands[0], asset, joined)
        bridge = Op.BRIDGE_LOW if joined is Op.MIN else Op.BRIDGE_HIGH
        return step.op is bridge and leaves.get(step.operands[0]) == spot_leaf(tape.leaves, asset)

    for step in tape.instructions:
        values.append(builder.copy(step, tuple(values[k] for k in step.operands)))
        if step.op in (Op.MIN, Op.MAX):
            for first, other in (step.operands, step.operands[::-1]):
                leaf = leaves.get(first)
                if leaf and leaf.kind is LeafKind.FORWARD and leaf.end == 0.0 and starts(other, leaf.asset, step.op):
                    values[-1] = values[other]
    outputs = [output.at(values[output.value]) for output in tape.outputs]
    return finished(builder, replace(tape, outputs=tuple(outputs)), ())
