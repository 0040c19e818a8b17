"""Scores: the derivatives of the log of a path's density by the leaves that its law is made of.

With levels and extremes held where they are, a leaf moves only their density: d/da E f = E f d log p/da, and f may jump
(the likelihood ratio method: Glasserman 2003, section 7.3). A step moves the logs by drifts m and by L z with a
triangular factor L of the covariance; with w = L'^-1 z the score by m is w, by L it is w z' - L'^-1, and a log spot is
the drift of the first step. Of a bridge only what is read has a density: where its extreme is read by one comparison,
whether it crossed that level, with probability exp(-2 (x0 - b)(x1 - b) / v); else the extreme itself.

A level S = exp(x) + e with escrowed dividends e may be held instead of its log. Then e moves x, by -1 / exp(x), and the
score by e is (1 + w - w') / exp(x): the 1 from dx = dS / exp(x), w of the step that ends at x, w' of the next one.

Every score is appended to a tape under construction as a value, on each path.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

from mcx.tape.builder import Builder
from mcx.tape.ops import Op
from mcx.tape.program import Leaf, LeafKind, Tape, spot_leaf
from mcx.tape.steps import Grid

LEAST = 1e-300
BRIDGES = (Op.BRIDGE_LOW, Op.BRIDGE_HIGH)


@dataclass(frozen=True, slots=True)
class Score:
    """The score by a leaf: a value, and the number of the step (from 1) whose density it belongs to."""

    leaf: Leaf
    value: int
    step: int


@dataclass(frozen=True, slots=True)
class Edge:
    """An extreme of the first step cannot lie within the spot: where the law ends moves with the log spot. What this
    adds to a derivative is `weight` times the function with `start` in place of `extreme`."""

    asset: int
    extreme: int
    start: int
    weight: int


@dataclass(frozen=True, slots=True)
class Scores:
    """All scores of a tape.

    first      by leaf; a leaf may have several, which add up
    edges      what comes on top by the log spots
    spots      the whole score by the log spot of each asset
    second     (d2 p / dx dy) / p for the log spots of each two assets, both orders; for each asset with itself. Where
               there are edges it is not complete, and would have no finite variance
    """

    first: tuple[Score, ...]
    spots: dict[int, int]
    second: dict[tuple[int, int], int]
    edges: tuple[Edge, ...] = ()


def scores(
    builder: Builder, tape: Tape, grid: Grid, known: Sequence[float | None], last: int, *, levels: bool = False
) -> Scores:
    """The scores of a tape's leaves up to step `last`, appended to `builder`, which goes on where the tape ends.

    known    for each value of the tape the number that it is on every path, or None (`registers.uniform_values`)
    levels   whether levels are held, not their logs, so that escrowed dividends have scores too
    """
    made = _Scores(builder, tape, grid, known)
    for number in range(1, last + 1):
        made.step(number)
    for number, step in enumerate(tape.instructions):
        if step.op in BRIDGES and made.step_of(number) <= last:
            made.bridge(number)
    for number, step in enumerate(tape.instructions):
        if levels and step.op is Op.LEAF and step.payload.kind is LeafKind.ESCROW and known[number] != 0.0:
            made.escrow(number)
    return made.all()


def latest_steps(tape: Tape, grid: Grid) -> list[int]:
    """For each value of the tape the number of the last step whose draws it depends on, 0 for none."""
    numbers = {time: number for number, time in enumerate(grid.times)}
    latest: list[int] = []
    for step in tape.instructions:
        last = max((latest[k] for k in step.operands), default=0)
        if step.op is Op.NORMAL:
            last = step.payload // len(grid.assets) + 1
        elif step.op in BRIDGES:
            last = max(last, numbers[tape.instructions[step.operands[2]].payload.end])
        latest.append(last)
    return latest


class _Scores:
    def __init__(self, builder: Builder, tape: Tape, grid: Grid, known: Sequence[float | None]):
        self.builder, self.tape, self.grid, self.known = builder, tape, grid, known
        self.leaves = {step.payload: number for number, step in enumerate(tape.instructions) if step.op is Op.LEAF}
        self.numbers = {time: number for number, time in enumerate(grid.times)}
        self.readers: dict[int, list[int]] = {}
        for number, step in enumerate(tape.instructions):
            for operand in step.operands:
                self.readers.setdefault(operand, []).append(number)
        self.read_out = {output.value for output in tape.outputs}
        self.first: list[Score] = []
        self.spots: dict[int, int] = {}
        self.precision: dict[tuple[int, int], int] = {}  # the inverse of the first step's covariance
        self.bends: dict[int, int] = {}  # by asset: second derivatives of the log of first bridges' laws
        self.edges: list[Edge] = []
        self.solved: dict[tuple[int, int], int] = {}  # w by the number of the step and the asset

    def all(self) -> Scores:
        emit = self.builder.emit
        second = {}
        for (one, other), inverse in self.precision.items():
            total = emit(Op.SUB, emit(Op.MUL, self.spots[one], self.spots[other]), inverse)
            second[one, other] = emit(Op.ADD, total, self.bends[one]) if one == other and one in self.bends else total
        spots = [Score(spot_leaf(self.tape.leaves, asset), value, 1) for asset, value in self.spots.items()]
        return Scores((*self.first, *spots), self.spots, second, tuple(self.edges))

    def step_of(self, bridge: int) -> int:
        """The number of the step that a bridge spans."""
        return self.numbers[self.tape.instructions[self.tape.instructions[bridge].operands[2]].payload.end]

    def step(self, number: int) -> None:
        """The scores of one step, by the logs that are read: the normal of another asset is noise of its own, and the
        rest is taken given that noise."""
        emit, assets = self.builder.emit, self.grid.assets
        span = {"start": self.grid.times[number - 1], "end": self.grid.times[number]}
        moving = [row for row, asset in enumerate(assets) if Leaf(LeafKind.DRIFT, asset, **span) in self.leaves]
        if not moving:
            return
        factors = {(i, j): Leaf(LeafKind.FACTOR, assets[i], assets[j], **span) for i in moving for j in range(i + 1)}
        lower = [[self.builder.leaf(factors[i, j]) for j in moving if j <= i] for i in moving]
        draws = {j: self.builder.input(Op.NORMAL, (number - 1) * len(assets) + j) for _, j in factors}
        inverse = [emit(Op.DIV, self.builder.constant(1.0), row[-1]) for row in lower]
        solved = dict(zip(moving, self._solved(lower, inverse, [draws[i] for i in moving]), strict=True))
        for i in moving:
            self.first.append(Score(Leaf(LeafKind.DRIFT, assets[i], **span), solved[i], number))
            self.solved[number, assets[i]] = solved[i]
        for (i, j), leaf in factors.items():
            value = emit(Op.MUL, solved[i], draws[j])
            value = emit(Op.SUB, value, inverse[moving.index(i)]) if i == j else value
            self.first.append(Score(leaf, value, number))
        if number == 1:
            columns = [self._solved(lower, inverse, [self.builder.constant(float(k == j)) for k in moving])
                       for j in moving]
            for row, i in enumerate(moving):
                self.spots[assets[i]] = solved[i]
                for other, j in enumerate(moving):
                    products = [emit(Op.MUL, column[row], column[other]) for column in columns]
                    self.precision[assets[i], assets[j]] = self.builder.fold(Op.ADD, products)

    def _solved(self, lower: list[list[int]], inverse: list[int], right: list[int]) -> list[int]:
        """w with L' w = right, from the last row up."""
        emit = self.builder.emit
        found = list(right)
        for i in range(len(right) - 1, -1, -1):
            total = right[i]
            for k in range(i + 1, len(right)):
                total = emit(Op.STEP, total, emit(Op.NEG, lower[k][i]), found[k])
            found[i] = emit(Op.MUL, total, inverse[i])
        return found

    def escrow(self, number: int) -> None:
        """The score by what is escrowed, which is added to the exponential of a log: in two parts, by their steps."""
        emit, leaf = self.builder.emit, self.tape.instructions[number].payload
        (level,), one = self.readers[number], self.builder.constant(1.0)
        (stripped,) = (k for k in self.tape.instructions[level].operands if k != number)
        assert self.tape.instructions[level].op is Op.ADD and self.tape.instructions[stripped].op is Op.EXP
        inverse = emit(Op.DIV, one, stripped)
        end = self.numbers[leaf.end]
        here, following = (end, leaf.asset), (end + 1, leaf.asset)
        if here in self.solved:
            self.first.append(Score(leaf, emit(Op.MUL, inverse, emit(Op.ADD, one, self.solved[here])), end))
        if following in self.solved:
            self.first.append(Score(leaf, emit(Op.NEG, emit(Op.MUL, inverse, self.solved[following])), end + 1))

    def bridge(self, number: int) -> None:
        """The score of what is read of a bridge: by its variance, and by the log spot where it starts there."""
        start, _, variance, _ = self.tape.instructions[number].operands
        leaf = self.tape.instructions[variance].payload
        levels = self._levels(number)
        by_variance, by_start, bend = self._extreme(number) if levels is None or len(levels) > 1 else \
            self._crossing(number, levels.pop()) if levels else (None, None, None)
        if by_variance is None:  # nobody reads it
            return
        self.first.append(Score(leaf, by_variance, self.step_of(number)))
        if self.known[start] is None:
            return
        for asset in (leaf.asset, leaf.other):  # the log spot, or the sum of two: of an asset and a rate of exchange
            if asset < 0:
                continue
            self.spots[asset] = self.builder.emit(Op.ADD, self.spots[asset], by_start)
            if bend is None:
                self.edges.append(self._edge(number, asset))
            else:
                before = self.bends.get(asset)
                self.bends[asset] = bend if before is None else self.builder.emit(Op.ADD, before, bend)

    def _crossing(self, number: int, level: int) -> tuple[int, int, int]:
        """Whether the bridge crossed a level. g is d log P / d log p: 1 where it did, -p / (1 - p) where not, and 0
        where an end lies beyond the level already."""
        emit, constant = self.builder.emit, self.builder.constant
        step = self.tape.instructions[number]
        x0, x1, variance, uniform = step.operands
        low = step.op is Op.BRIDGE_LOW
        slope = emit(Op.DIV, constant(-2.0), variance)
        reach = emit(Op.MUL, emit(Op.SUB, x1, level), slope)  # d log p / d x0
        exponent = emit(Op.MUL, emit(Op.SUB, x0, level), reach)
        chance = emit(Op.EXP, exponent)
        odds = emit(Op.DIV, chance, emit(Op.SUB, constant(1.0), chance))
        pull = emit(Op.SELECT, emit(Op.LE, uniform, chance), constant(1.0), emit(Op.NEG, odds))
        inside = emit(Op.AND, *(emit(Op.LT, level, x) if low else emit(Op.LT, x, level) for x in (x0, x1)))
        pull = emit(Op.SELECT, inside, pull, constant(0.0))
        by_variance = emit(Op.MUL, pull, emit(Op.MUL, exponent, emit(Op.DIV, constant(-1.0), variance)))
        by_start = emit(Op.MUL, pull, reach)
        bend = emit(Op.MUL, emit(Op.MUL, reach, by_start), emit(Op.SUB, constant(1.0), pull))
        return by_variance, by_start, bend

    def _extreme(self, number: int) -> tuple[int, int, None]:
        """The extreme m itself, with density 2 R / v exp(-2 (x0 - m)(x1 - m) / v), R = |x0 + x1 - 2 m|; the exponent
        is the log of the uniform."""
        emit, constant = self.builder.emit, self.builder.constant
        step = self.tape.instructions[number]
        x0, x1, variance, uniform = step.operands
        log = emit(Op.LOG, uniform)
        by_variance = emit(Op.MUL, emit(Op.ADD, log, constant(1.0)), emit(Op.DIV, constant(-1.0), variance))
        rest = emit(Op.SUB, emit(Op.ADD, x0, x1), emit(Op.ADD, number, number))  # +R for a low, -R for a high
        slope = emit(Op.DIV, constant(-2.0), variance)
        by_start = emit(Op.ADD, emit(Op.DIV, constant(1.0), rest), emit(Op.MUL, emit(Op.SUB, x1, number), slope))
        return by_variance, by_start, None

    def _edge(self, number: int, asset: int) -> Edge:
        """The density of an extreme where it is the start itself, 2 |x1 - x0| / v, if the other end lies on this
        side."""
        emit, constant = self.builder.emit, self.builder.constant
        step = self.tape.instructions[number]
        x0, x1, variance, _ = step.operands
        side = Op.MAX if step.op is Op.BRIDGE_LOW else Op.MIN
        apart = emit(side, emit(Op.SUB, x1, x0), constant(0.0))
        return Edge(asset, number, x0, emit(Op.MUL, apart, emit(Op.DIV, constant(2.0), variance)))

    def _levels(self, number: int) -> set[int] | None:
        """The log levels that an extreme is compared with, where it is only compared; None where it is read else."""
        joined = Op.MIN if self.tape.instructions[number].op is Op.BRIDGE_LOW else Op.MAX
        found: set[int] = set()

        def follow(value: int, undo: Callable[[int], int]) -> bool:
            if value in self.read_out:
                return False
            for reader in self.readers.get(value, ()):
                step = self.tape.instructions[reader]
                if step.op is joined:
                    if not follow(reader, undo):
                        return False
                    continue
                undone = self._undone(reader, value, undo)
                if undone is None:
                    return False
                if isinstance(undone, int):
                    found.add(undone)
                elif not follow(reader, undone):
                    return False
            return True

        return found if follow(number, lambda level: level) else None

    def _undone(self, reader: int, value: int, undo: Callable[[int], int]) -> int | Callable[[int], int] | None:
        """What a reader of a value says about it: the level that it is compared with, as seen from the bridge; or, for
        a rising function, how a level of the function is seen from the bridge; None for anything else."""
        emit, step = self.builder.emit, self.tape.instructions[reader]
        if step.op is Op.EXP:
            least = self.builder.constant(LEAST)  # no level is below it, and its log is a number
            return lambda level: undo(emit(Op.LOG, emit(Op.MAX, level, least)))
        if len(step.operands) != 2 or step.operands[0] == step.operands[1]:
            return None
        other = step.operands[1] if step.operands[0] == value else step.operands[0]
        number, first = self.known[other], step.operands[0] == value
        if number is None:
            return None
        match step.op:
            case Op.LT | Op.LE:
                return undo(other)
            case Op.ADD:
                return lambda level: undo(emit(Op.SUB, level, other))
            case Op.SUB if first:
                return lambda level: undo(emit(Op.ADD, level, other))
            case Op.MUL if number > 0.0:
                return lambda level: undo(emit(Op.DIV, level, other))
            case Op.DIV if first and number > 0.0:
                return lambda level: undo(emit(Op.MUL, level, other))
        return None
