"""A tape with the sums that give all derivatives of its price, first order and second by the spots.

The payments of the price are shared out: some are taken pathwise, by the adjoint of the tape (Glasserman 2003, section
7.2; Giles & Glasserman 2006), right where a payment has no jumps; the others by likelihood ratio (section 7.3): the
payment times the score of everything that is drawn, plus the derivative through what is read openly (discount factors)
with the levels held. A payment is multiplied only by scores of steps up to the last that it depends on, since later
ones have mean zero given all that it depends on.

Second derivatives by the spots: of the pathwise part the likelihood ratio of its delta, of the other part the
second-order score.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from itertools import accumulate, combinations_with_replacement

from mcx.tape.adjoint import Gradient, finished, of_the_market, on_paths, sums_of, sweep
from mcx.tape.builder import Builder
from mcx.tape.ops import Op
from mcx.tape.program import Instruction, LeafKind, Sum, Tape, spot_leaf
from mcx.tape.scores import BRIDGES, Scores, latest_steps, scores
from mcx.tape.steps import Grid

Numbers = tuple[int, ...]  # of sums; where controls stand with them, each after what it is a control of


def pairs_of(assets: int) -> list[tuple[int, int]]:
    """The pairs of spots that second derivatives are taken by: each asset with itself, then every two."""
    every = list(combinations_with_replacement(range(assets), 2))
    return sorted(every, key=lambda pair: (pair[0] != pair[1], pair))


@dataclass(frozen=True, slots=True)
class DerivativeTape:
    """A tape and what its sums are.

    derived, controls   derivatives by leaves, and their controls
    by_score, by_path   derivatives by leaves of a smooth stand-in for what jumps, in both ways: the same in the mean
    crossed             for each pair of spots the two likelihood ratios of the one's pathwise delta by the other
    curved              for each pair the sum with the second-order score, and its control
    tied                by asset the likelihood ratio of the pathwise part, and its delta: the same in the mean
    stood               for each pair the stand-in times the second-order score, and `crossed` of its own delta
    rough               whether `curved` has no finite variance

    The last sum is the price.
    """

    tape: Tape
    derived: range
    controls: range
    by_score: range
    by_path: range
    crossed: tuple[tuple[Numbers, ...], ...]
    curved: tuple[Numbers, ...]
    tied: dict[int, tuple[Numbers, int]]
    stood: tuple[tuple[Numbers, ...], ...]
    rough: bool


def derivative_tape(
    tape: Tape, grid: Grid, assets: int, known: Sequence[float | None], *, pathwise: Sequence[int],
    likelihood: Sequence[int], second: bool, proxy: int | None = None, levels: bool = False,
) -> DerivativeTape:
    """From a tape whose only output is the price and two lists that share out its payments.

    known    for each value the number that it is on every path, or None
    second   whether second derivatives are taken
    proxy    a smooth value that stands for the payments taken by likelihood ratio: it is differentiated in both ways,
             and the difference is a control
    levels   whether likelihood ratios hold levels, escrowed dividends included, and not only their logs
    """
    making = _Making(tape, grid, known, pathwise, likelihood, proxy, levels)
    if likelihood:
        making.by_likelihood()
    pairs = pairs_of(assets) if second else []
    crossed = [making.crossed(pair, making.slopes) for pair in pairs]
    curved = [making.curved(pair) for pair in pairs]
    tied = making.tied() if second else {}
    stood = [making.stood(pair) for pair in pairs]
    making.noted(Sum(tape.outputs[0].value))
    groups = making.groups()
    ends = list(accumulate(len(group) for group in groups))
    ranges = [range(end - len(group), end) for group, end in zip(groups, ends, strict=True)][:-1]
    made = finished(making.builder, tape, [part for group in groups for part in group])
    return DerivativeTape(made, *ranges, tuple(crossed), tuple(curved), tied, tuple(stood),
                          rough=bool(likelihood and making.law.edges))


class _Making:
    """The sums of a derivative tape under construction."""

    def __init__(self, tape: Tape, grid: Grid, known: Sequence[float | None], pathwise: Sequence[int],
                 likelihood: Sequence[int], proxy: int | None, levels: bool):
        self.tape, self.grid, self.likelihood, self.proxy, self.levels = tape, grid, likelihood, proxy, levels
        self.builder = Builder.of(tape)
        self.later = _later(self.builder, tape, grid, likelihood)
        self.running = _running(self.builder, tape, grid, likelihood, self.later)
        self.smooth = sweep(self.builder, _counted(self.builder, pathwise), of_the_market)
        self.total = self.builder.fold(Op.ADD, pathwise) if pathwise else self.builder.constant(0.0)
        self.derived, self.controls, self.extra = list(sums_of(self.smooth)), [], []
        self.by_score, self.by_path = [], []  # of the stand-in
        last = max(self.later, default=min(1, len(grid.times) - 1))
        self.law: Scores = scores(self.builder, tape, grid, known, last, levels=levels)
        self.slopes = _by_log_spots(self.builder, tape, self.smooth, self.law.spots) if self.smooth else {}
        self.proxy_slopes: dict[int, int] = {}

    def by_likelihood(self) -> None:
        """First derivatives of the payments that jump, with their controls."""
        builder, later = self.builder, self.later
        held = {number for number, step in enumerate(self.tape.instructions)
                if step.op in (Op.STEP, *BRIDGES) or self.levels and _is_escrow(step)}
        self.derived += sums_of(sweep(builder, _counted(builder, self.likelihood), of_the_market, held))
        for score in self.law.first:
            if score.step in later:
                leaf = builder.leaf(score.leaf)
                self.derived.append(Sum(later[score.step], score.value, leaf))
                self.controls.append(Sum(score.value, self.running[score.step], leaf))
        for edge in self.law.edges if 1 in later else ():
            leaf = builder.leaf(spot_leaf(self.tape.leaves, edge.asset))
            self.derived.append(Sum(replaced(builder, later[1], edge.extreme, edge.start), edge.weight, leaf))
            self.controls.append(Sum(edge.weight, None, leaf))
        if self.proxy is not None:
            self._stand_in(self.proxy)

    def _stand_in(self, proxy: int) -> None:
        """The stand-in by its scores and by its gradient, for each leaf times the flag that is known before the leaf's
        step, so that the means stay the same."""
        emit, builder = self.builder.emit, self.builder
        number = {time: number for number, time in enumerate(self.grid.times)}
        gradient = sweep(builder, {proxy: builder.constant(1.0)}, of_the_market)
        for value, parts in gradient.items():
            step = builder.instructions[value]
            last = number[step.payload.end] if step.op is Op.LEAF else 1  # else the log spot with the first drift
            if (last or 1) in self.later:
                flag = self.running[last or 1]
                self.by_path += [Sum(part.left if flag is None else emit(Op.MUL, part.left, flag), part.right, value)
                                 for part in parts]
        held = {step: proxy if flag is None else emit(Op.MUL, proxy, flag) for step, flag in self.running.items()}
        self.by_score += [Sum(held[score.step], score.value, builder.leaf(score.leaf)) for score in self.law.first
                          if score.step in held and score.leaf.kind is not LeafKind.ESCROW]  # it is made of logs
        for edge in self.law.edges if 1 in held else ():
            self.by_score.append(Sum(proxy, edge.weight, builder.leaf(spot_leaf(self.tape.leaves, edge.asset))))
        self.proxy_slopes = _by_log_spots(builder, self.tape, gradient, self.law.spots)

    def groups(self) -> tuple[list[Sum], ...]:
        """All sums, in their order."""
        return self.derived, self.controls, self.by_score, self.by_path, self.extra

    def noted(self, *sums: Sum) -> Numbers:
        """The numbers of further sums; all first derivatives stand before them."""
        first = sum(map(len, self.groups()))
        self.extra += sums
        return tuple(range(first, first + len(sums)))

    def crossed(self, pair: tuple[int, int], slopes: dict[int, int]) -> tuple[Numbers, ...]:
        if not all(asset in slopes for asset in pair):
            return ()
        return tuple(self.noted(*self._by_score(slopes[one], other)) for one, other in (pair, pair[::-1]))

    def stood(self, pair: tuple[int, int]) -> tuple[Numbers, ...]:
        if pair not in self.law.second or 1 not in self.later or not all(asset in self.proxy_slopes for asset in pair):
            return ()
        return self.noted(Sum(self.proxy, self.law.second[pair])), *self.crossed(pair, self.proxy_slopes)

    def curved(self, pair: tuple[int, int]) -> Numbers:
        if 1 not in self.later or pair not in self.law.second:
            return ()
        bend = self.law.second[pair]
        return self.noted(Sum(self.later[1], bend), Sum(bend))

    def tied(self) -> dict[int, tuple[Numbers, int]]:
        return {asset: (self.noted(*self._by_score(self.total, asset)), *self.noted(Sum(slope)))
                for asset, slope in self.slopes.items()}

    def _by_score(self, value: int, asset: int) -> list[Sum]:
        """The likelihood ratio of a value by an asset's log spot: sums and their controls in turn."""
        move = self.law.spots[asset]
        found = [Sum(value, move), Sum(move)]
        for edge in self.law.edges:
            if edge.asset == asset:
                there = replaced(self.builder, value, edge.extreme, edge.start)
                found += [Sum(there, edge.weight), Sum(edge.weight)]
        return found


def _is_escrow(step: Instruction) -> bool:
    return step.op is Op.LEAF and step.payload.kind is LeafKind.ESCROW


def _counted(builder: Builder, values: Iterable[int]) -> dict[int, int]:
    """How often each value counts, as values of the tape."""
    return {value: builder.constant(float(count)) for value, count in Counter(values).items()}


def replaced(builder: Builder, value: int, old: int, new: int) -> int:
    """A value of the tape as it would be with `new` in place of `old`."""
    instead = {old: new}
    for number in range(old + 1, value + 1):
        step = builder.instructions[number]
        if any(k in instead for k in step.operands):
            instead[number] = builder.emit(step.op, *(instead.get(k, k) for k in step.operands), place=step.place)
    return instead.get(value, value)


def _by_log_spots(builder: Builder, tape: Tape, gradient: Gradient, assets: Iterable[int]) -> dict[int, int]:
    """By asset the derivative by its log spot as a value on each path: paths read it alone, or with the first drift
    added."""
    spots = {asset: builder.leaf(spot_leaf(tape.leaves, asset)) for asset in assets}
    read = {spot: [spot] for spot in spots.values()}
    for number, step in enumerate(tape.instructions):
        if step.op is Op.ADD:
            for operand in step.operands:
                if operand in read:
                    read[operand].append(number)
    return {asset: on_paths(builder, [part for value in read[spot] for part in gradient.get(value, ())])
            for asset, spot in spots.items()}


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


def _running(
    builder: Builder, tape: Tape, grid: Grid, payments: Sequence[int], later: Iterable[int]
) -> dict[int, int | None]:
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
