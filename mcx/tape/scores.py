"""Scores: the derivative of the log density of a path by every leaf of the model, as values of the tape.

A path is the logs of all levels on the grid, and the extremes of its bridges. Where the payoff jumps, the derivative
of the price by a leaf is the mean of payoff times score, the path held fixed, plus that of what the payoff reads of
the leaf openly (P. Glasserman, "Monte Carlo Methods in Financial Engineering", 2003, section 7.3): sweep the payoff
with `Scores.held`, and add.

A step moves the logs by m + L z, with L lower triangular. With w = L^-T z the score of a drift is w_i and that of a
factor w_i z_j, less 1 / L_ii on the diagonal; that of the starting log is w_i of the first step. Where a log of the
step is not on the tape, since nothing reads it, its normal is noise of its own: the rest is taken given that noise.

The extreme of a bridge has P(min <= m) = exp(-2 (x0 - m)(x1 - m) / v), and by the variance v the score (-1 - log u) /
v. By x0, which is a leaf in the first step, it has none: the extreme cannot pass x0, so its range moves. But a payoff
that asks only whether certain barriers were passed depends on the interval between barriers where the extreme lies,
and the probability of that has a derivative by x0. An extreme that is read as a number and compared with nothing is
not held in that step: its derivative is the payoff's own. Where it is both, or compared with what is random, there is
no score by that asset's spot.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np

from mcx.faults import Place
from mcx.tape.adjoint import MODEL
from mcx.tape.builder import Builder
from mcx.tape.ops import Op
from mcx.tape.program import Instruction, Leaf, LeafKind, Sum, Tape

BRIDGES = (Op.BRIDGE_LOW, Op.BRIDGE_HIGH)
COMPARISONS = (Op.LT, Op.LE, Op.EQ, Op.NE)
FAR, LEAST = 1e3, 1e-300  # in logs, farther than any barrier; and a level that none is below
SINGULAR = 1e-7  # of the deviation of a log that is its own normal's share

Span = tuple[float, float]


@dataclass(frozen=True, slots=True)
class Scores:
    """Scores on each path.

    first    by leaf (the value of the tape that it is): the first derivative of the density, over the density
    second   by pair of starting logs, the smaller number first: the second derivative, over the density; if asked for,
             and not for a log with an extreme that is not held
    held     what does not move in the part that is added: logs and extremes
    refused  starting logs without a score, with the place of what stands against it
    """

    first: Mapping[int, int]
    second: Mapping[tuple[int, int], int]
    held: frozenset[int]
    refused: Mapping[int, Place | None]

    def sums(self, value: int) -> tuple[tuple[Sum, ...], tuple[Sum, ...]]:
        """The sums over paths of value times score for each leaf, and of the score itself, whose mean is 0: taken off
        with any coefficient that does not come from the same paths, it lowers the variance."""
        return (tuple(Sum(value, score, leaf) for leaf, score in self.first.items()),
                tuple(Sum(score, None, leaf) for leaf, score in self.first.items()))


def singular(tape: Tape, leaf_values: Sequence[float] | np.ndarray) -> tuple[Leaf, ...]:
    """The diagonal factors that are zero, or as good as zero: no density, so no score. Zero vol, or a correlation at
    which one asset follows from others."""
    known = dict(zip(tape.leaves, leaf_values, strict=True))
    squares: dict[tuple[int, Span], float] = {}
    for leaf, value in known.items():
        if leaf.kind is LeafKind.FACTOR:
            key = leaf.asset, (leaf.start, leaf.end)
            squares[key] = squares.get(key, 0.0) + value * value
    return tuple(
        leaf for leaf, value in known.items() if leaf.kind is LeafKind.FACTOR and leaf.asset == leaf.other
        and abs(value) <= SINGULAR * np.sqrt(squares[leaf.asset, (leaf.start, leaf.end)])
    )


def scores(builder: Builder, values: Iterable[int], second: bool = False) -> Scores:
    """The scores of that part of a path which decides the values, appended to the tape under construction.

    The tape is expanded (`steps.py`) and has no adjoint yet. What comes after the values are decided has a score of
    mean 0 whatever they are, and is left out.
    """
    return _Scoring(builder, frozenset(values)).run(second)


@dataclass(slots=True)
class _Step:
    """The values of one step: factors by (asset, other), normals by other, drifts by asset."""

    factors: dict[tuple[int, int], int] = field(default_factory=dict)
    normals: dict[int, int] = field(default_factory=dict)
    drifts: dict[int, int] = field(default_factory=dict)

    @property
    def assets(self) -> list[int]:
        """Those whose log is on the tape."""
        return sorted({asset for asset, _ in self.factors})


@dataclass(frozen=True, slots=True)
class _Uses:
    """How the payoff reads an extreme: barriers (logs of it) that it is compared with, whether it is read as a number,
    and the place of a comparison with what is random, or of nothing."""

    barriers: tuple[int, ...]
    as_number: bool
    compared: bool
    place: Place | None


class _Scoring:
    def __init__(self, builder: Builder, values: frozenset[int]):
        self.builder, self.values = builder, values
        self.steps: tuple[Instruction, ...] = tuple(builder.instructions)
        self.needed = self._needed()
        self.opened: set[int] = set()  # starting logs with an extreme that is not held
        self.by_span: dict[Span, _Step] = {}
        self.spots: dict[int, int] = {}  # by asset
        self.uniform: list[bool] = []
        self.users: list[list[int]] = [[] for _ in self.steps]
        for number, step in enumerate(self.steps):
            self._note(number, step)

    def run(self, second: bool) -> Scores:
        first: dict[int, int] = {}
        for step in self.by_span.values():
            self._step(step, first)
        held = {number for number, step in enumerate(self.steps) if step.op in MODEL and self.needed[number]}
        refused: dict[int, Place | None] = {}
        curved: dict[int, int] = {}  # by spot: second derivative of the probability of its bridges' intervals, over it
        sloped: dict[int, int] = {}
        for number in sorted(held):
            if self.steps[number].op in BRIDGES:
                self._bridge(number, first, held, refused, sloped, curved)
        start = next((step for (begin, _), step in self.by_span.items() if begin == 0.0), _Step())
        moved = dict(zip(start.assets, self._solved(start, [start.normals[k] for k in start.assets]), strict=True))
        for asset, spot in self.spots.items():
            if spot not in refused and asset in moved:
                first[spot] = self._sum(moved[asset], sloped.get(spot))
        pairs = self._second(start, first, sloped, curved) if second else {}
        return Scores(first, pairs, frozenset(held), refused)

    def _needed(self) -> bytearray:
        """Which instructions the values depend on."""
        needed = bytearray(len(self.steps))
        for value in self.values:
            needed[value] = 1
        for number in range(len(self.steps) - 1, -1, -1):
            if needed[number]:
                for operand in self.steps[number].operands:
                    needed[operand] = 1
        return needed

    def _note(self, number: int, step: Instruction) -> None:
        self.uniform.append(step.op in (Op.CONSTANT, Op.LEAF)
                            or (bool(step.operands) and all(self.uniform[k] for k in step.operands)))
        if not self.needed[number]:
            return
        for operand in set(step.operands):
            self.users[operand].append(number)
        if step.op is Op.LEAF and step.payload.kind is LeafKind.LOG_SPOT:
            self.spots[step.payload.asset] = number
        elif step.op is Op.LEAF and step.payload.kind is LeafKind.DRIFT:
            self._span(step.payload).drifts[step.payload.asset] = number
        elif step.op is Op.STEP:
            factor = self.steps[step.operands[1]].payload
            assert isinstance(factor, Leaf) and factor.kind is LeafKind.FACTOR, "scores come before any sweep"
            self._span(factor).factors[factor.asset, factor.other] = step.operands[1]
            self._span(factor).normals[factor.other] = step.operands[2]

    def _span(self, leaf: Leaf) -> _Step:
        return self.by_span.setdefault((leaf.start, leaf.end), _Step())

    def _step(self, step: _Step, first: dict[int, int]) -> None:
        emit, one = self.builder.emit, self.builder.constant(1.0)
        moved = dict(zip(step.assets, self._solved(step, [step.normals[k] for k in step.assets]), strict=True))
        for asset, drift in step.drifts.items():
            if asset in moved:
                first[drift] = moved[asset]
        for (asset, other), factor in step.factors.items():
            score = emit(Op.MUL, moved[asset], step.normals[other])
            first[factor] = emit(Op.SUB, score, emit(Op.DIV, one, factor)) if asset == other else score

    def _solved(self, step: _Step, right: Sequence[int]) -> list[int]:
        """w of L^T w = right, from the last asset to the first; L without what is not on the tape."""
        emit, assets = self.builder.emit, step.assets
        found: dict[int, int] = {}
        for asset, value in reversed(list(zip(assets, right, strict=True))):
            for later in assets:
                if later > asset and (later, asset) in step.factors:
                    value = emit(Op.SUB, value, emit(Op.MUL, step.factors[later, asset], found[later]))
            found[asset] = emit(Op.DIV, value, step.factors[asset, asset])
        return [found[asset] for asset in assets]

    def _sum(self, value: int, other: int | None) -> int:
        return value if other is None else self.builder.emit(Op.ADD, value, other)

    def _bridge(self, number: int, first: dict[int, int], held: set[int], refused: dict[int, Place | None],
                sloped: dict[int, int], curved: dict[int, int]) -> None:
        """The scores of one extreme. `sloped` and `curved` take, by starting log, the first and second derivative of
        its interval's probability, over the probability."""
        emit, constant = self.builder.emit, self.builder.constant
        x0, _, variance, u = self.steps[number].operands
        uses = self._uses(number) if self.uniform[x0] else None
        if uses and uses.as_number and not uses.compared and not uses.barriers:
            held.discard(number)
            self.opened.add(x0)
            return
        by_variance = emit(Op.SUB, constant(-1.0), emit(Op.LOG, u))
        first[variance] = self._sum(emit(Op.DIV, by_variance, variance), first.get(variance))
        if uses is None:
            return
        if uses.compared or (uses.barriers and uses.as_number):
            refused[x0] = uses.place
        elif uses.barriers:
            slope, curve = self._interval(number, uses.barriers)
            if x0 in sloped:  # independent given the ends: (PQ)'' / PQ = P'' / P + 2 P' Q' / PQ + Q'' / Q
                both = emit(Op.MUL, constant(2.0), emit(Op.MUL, sloped[x0], slope))
                curve = emit(Op.ADD, emit(Op.ADD, curved[x0], curve), both)
            sloped[x0], curved[x0] = self._sum(slope, sloped.get(x0)), curve

    def _uses(self, number: int) -> _Uses:
        """Everything that reads an extreme: through joined extremes, its exponential, and scaling by what is the same
        on every path, up to comparisons."""
        barriers: list[int] = []
        as_number, compared, place = False, False, None
        waiting: list[tuple[int, tuple[int, ...]]] = [(number, ())]  # a value, and how it came from the extreme
        seen: set[int] = set()
        while waiting:
            value, way = waiting.pop()
            as_number |= value in self.values
            for user in self.users[value]:
                step = self.steps[user]
                fixed = [operand for operand in step.operands if self.uniform[operand]]
                scaled = step.op in (Op.ADD, Op.SUB, Op.MUL, Op.DIV) and fixed
                if step.op in COMPARISONS and fixed:
                    barriers.append(self._undone(fixed[0], way))
                elif step.op in COMPARISONS:
                    compared, place = True, step.place
                elif step.op in (Op.MIN, Op.MAX, Op.EXP, Op.NEG) or scaled:
                    if user not in seen:
                        seen.add(user)
                        waiting.append((user, way if step.op in (Op.MIN, Op.MAX) else (*way, user)))
                else:
                    as_number, place = True, place or step.place
        return _Uses(tuple(dict.fromkeys(barriers)), as_number, compared, place)

    def _undone(self, level: int, way: Sequence[int]) -> int:
        """The extreme at which what was made of it on the way equals a level."""
        emit = self.builder.emit
        inverse = {Op.ADD: Op.SUB, Op.SUB: Op.ADD, Op.MUL: Op.DIV, Op.DIV: Op.MUL}
        for user in reversed(way):
            step = self.steps[user]
            if step.op is Op.EXP:  # no level is below the least number
                level = emit(Op.LOG, emit(Op.MAX, level, self.builder.constant(LEAST)))
            elif step.op is Op.NEG:
                level = emit(Op.NEG, level)
            elif step.op in (Op.SUB, Op.DIV) and self.uniform[step.operands[0]]:
                level = emit(step.op, step.operands[0], level)
            else:
                fixed = step.operands[1] if self.uniform[step.operands[1]] else step.operands[0]
                level = emit(inverse[step.op], level, fixed)
        return level

    def _interval(self, number: int, barriers: Sequence[int]) -> tuple[int, int]:
        """P' / P and P'' / P by x0, for the probability P that the extreme is between the barriers next to it.

        With F(b) = exp(-2 (x0 - b)+ (x1 - b)+ / v), for a minimum, P = F(above) - F(below); a maximum is reflected.
        """
        emit, constant = self.builder.emit, self.builder.constant
        step = self.steps[number]
        high = step.op is Op.BRIDGE_HIGH

        def mirrored(value: int) -> int:
            return emit(Op.NEG, value) if high else value

        x0, x1, m = mirrored(step.operands[0]), mirrored(step.operands[1]), mirrored(number)
        above, below = constant(FAR), constant(-FAR)
        for barrier in map(mirrored, barriers):
            passed = emit(Op.LE, m, barrier)
            above = emit(Op.MIN, above, emit(Op.SELECT, passed, barrier, constant(FAR)))
            below = emit(Op.MAX, below, emit(Op.SELECT, passed, constant(-FAR), barrier))
        chances, slopes, curves = [], [], []
        for barrier in (above, below):
            ends = [emit(Op.MAX, emit(Op.SUB, x, barrier), constant(0.0)) for x in (x0, x1)]
            rate = emit(Op.DIV, emit(Op.MUL, ends[1], constant(-2.0)), step.operands[2])
            rate = emit(Op.SELECT, emit(Op.LT, constant(0.0), ends[0]), rate, constant(0.0))
            chance = emit(Op.EXP, emit(Op.MUL, rate, ends[0]))
            chances.append(chance)
            slopes.append(emit(Op.MUL, rate, chance))
            curves.append(emit(Op.MUL, rate, slopes[-1]))
        chance = emit(Op.SUB, *chances)
        possible = emit(Op.LT, constant(0.0), chance)

        def relative(pair: Sequence[int]) -> int:
            return emit(Op.SELECT, possible, emit(Op.DIV, emit(Op.SUB, *pair), chance), constant(0.0))

        return mirrored(relative(slopes)), relative(curves)

    def _second(self, start: _Step, first: Mapping[int, int], sloped: Mapping[int, int],
                curved: Mapping[int, int]) -> dict[tuple[int, int], int]:
        """Second derivatives by two starting logs: s_i s_j - (L L^T)^-1_ij, and what the bridges curve."""
        emit, constant, assets = self.builder.emit, self.builder.constant, start.assets
        columns = [self._solved(start, [constant(float(k == row)) for k in range(len(assets))])
                   for row in range(len(assets))]
        found: dict[tuple[int, int], int] = {}
        for i, one in enumerate(assets):
            for j, other in enumerate(assets[: i + 1]):
                pair = self.spots.get(one, -1), self.spots.get(other, -1)
                if not all(spot in first and spot not in self.opened for spot in pair):
                    continue
                inverse = self.builder.fold(Op.ADD, [emit(Op.MUL, column[i], column[j]) for column in columns])
                value = emit(Op.SUB, emit(Op.MUL, first[pair[0]], first[pair[1]]), inverse)
                if one == other and pair[0] in sloped:
                    square = emit(Op.MUL, sloped[pair[0]], sloped[pair[0]])
                    value = emit(Op.ADD, value, emit(Op.SUB, curved[pair[0]], square))
                found[min(pair), max(pair)] = value
        return found
