"""Levels become steps: the model's part of the tape.

The contract's tape reads levels at dates, lowest and highest levels over watched stretches, and chances that barriers
are not reached. Here each becomes a walk of the logs over one common grid. Dates that nothing reads are no grid dates,
so unobserved steps are merged; a watched stretch is split at every node of a curve inside it, because the law of a
bridge's extreme needs drift per unit of variance to be constant within a step.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from mcx.faults import Place
from mcx.tape.builder import Builder
from mcx.tape.ops import Op
from mcx.tape.passes import drop_dead_code, in_order_of_steps
from mcx.tape.program import Bound, Leaf, LeafKind, LevelKey, Tape, Unhit

SAME_TIME = 1e-9  # years: about 0.03 s; dates closer than that are one date, written in two ways


@dataclass(frozen=True, slots=True)
class Grid:
    """Times in years from the valuation date, the first 0, and the numbers of the assets that are simulated."""

    times: tuple[float, ...]
    assets: tuple[int, ...]


def expand_levels(tape: Tape, nodes: Sequence[float], pieces: int = 1) -> tuple[Tape, Grid]:
    """The tape with every LEVEL, LOW, HIGH, UNHIT and MOMENT made of normals and uniforms, without dead code, and its
    grid.

    Normals are numbered step by step, within a step by asset; asset i moves by its drift and by the normals of the
    assets up to itself times the lower-triangular factor of the step's covariance. `nodes` are the times of the
    market's curve points. Where barriers of several assets are watched together, what they span is refined to at
    least that many `pieces`.
    """
    walk = _Walk(tape, nodes, pieces)
    values: list[int] = []
    for step in tape.instructions:
        if step.op is Op.LEVEL:
            values.append(walk.level(step.payload, step.place))
        elif step.op in (Op.LOW, Op.HIGH):
            values.append(walk.extreme(step.op, step.payload, step.place))
        elif step.op is Op.UNHIT:
            values.append(walk.unhit(step.payload, [values[k] for k in step.operands]))
        elif step.op is Op.MOMENT:
            values.append(walk.moment(step.payload, values[step.operands[0]]))
        else:
            values.append(walk.builder.copy(step, tuple(values[k] for k in step.operands)))
    outputs = [output.at(values[output.value]) for output in tape.outputs]
    grid = Grid(tuple(walk.times), tuple(walk.assets))
    normals = walk.steps * len(grid.assets) + (walk.pair is not None)
    made = drop_dead_code(walk.builder.tape(outputs, normals, walk.uniforms))
    return in_order_of_steps(made, walk.step_of) if walk.chances else made, grid


def grid_times(read: Iterable[LevelKey], watched: Iterable[LevelKey], nodes: Iterable[float]) -> list[float]:
    """0, every time read, both ends of every watched stretch, and the nodes strictly inside one."""
    watched = list(watched)
    wanted = {0.0} | {key.time for key in read} | {end for key in watched for end in (key.start, key.time)}
    times: list[float] = []
    for time in sorted(wanted):
        if not times or time - times[-1] > SAME_TIME:
            times.append(time)
    inside = {
        node
        for node in nodes
        if any(key.start < node < key.time for key in watched)
        and all(abs(node - time) > SAME_TIME for time in times)
    }
    return sorted({*times, *inside})


def refined(times: Sequence[float], stretches: Sequence[tuple[float, float]], pieces: int) -> list[float]:
    """The times with every step inside one of the stretches cut into equal parts, none longer than what the
    stretches span over `pieces`."""
    if pieces == 1 or not stretches:
        return list(times)
    span = max(end for _, end in stretches) - min(start for start, _ in stretches)
    found = list(times[:1])
    for start, end in zip(times, times[1:]):
        inside = any(first < end and start < last for first, last in stretches)
        parts = math.ceil((end - start) / span * pieces - SAME_TIME) if inside else 1
        found += [start + (end - start) * k / parts for k in range(1, parts)] + [end]
    return found


class _Walk:
    """The logs of the assets, moved along the grid as the tape asks for later and later dates."""

    def __init__(self, tape: Tape, nodes: Sequence[float], pieces: int):
        levels = [step.payload for step in tape.instructions if step.op is Op.LEVEL]
        extremes = {(step.op, step.payload): None for step in tape.instructions if step.op in (Op.LOW, Op.HIGH)}
        chances = [step.payload for step in tape.instructions if step.op is Op.UNHIT]
        watched = {key for _, key in extremes} | {one.key for chance in chances for one in chance.barriers}
        watched |= {step.payload for step in tape.instructions if step.op is Op.MOMENT}
        together = {one.key for chance in chances if chance.bound is not Bound.EXACT for one in chance.barriers}
        self.times = refined(grid_times(levels, watched, nodes), [(key.start, key.time) for key in together], pieces)
        self._number = {time: number for number, time in enumerate(self.times)}
        self.assets = sorted({key.asset for key in levels if self.number(key.time)} | {key.asset for key in watched})
        self.chances = bool(chances)
        self.builder = Builder()
        self.uniforms = 0
        self.reached = 0
        self.logs: dict[tuple[int, int], int] = {}  # (asset, grid number) -> log level
        self.extremes: dict[tuple[Op, LevelKey], int | None] = extremes
        self._unhit: dict[tuple, int] = {}
        self.pair: tuple[int, int] | None = None  # the square of a normal and a uniform, for the moments of hits
        self.covering: list[list[tuple[Op, LevelKey]]] = [[] for _ in self.times]  # by the step's end
        for op, key in extremes:
            for number in range(self.number(key.start) + 1, self.number(key.time) + 1):
                self.covering[number].append((op, key))

    def number(self, time: float) -> int:
        """The grid date of a time that is read; times closer than SAME_TIME share one."""
        if time not in self._number:
            nearest = min(self.times, key=lambda known: abs(known - time))
            self._number[time] = self._number[nearest]
        return self._number[time]

    def level(self, key: LevelKey, place: Place | None) -> int:
        number = self.number(key.time)
        if number == 0:  # the spot itself, to the last digit: its log and back would miss a barrier at the spot
            return self.builder.leaf(Leaf(LeafKind.FORWARD, asset=key.asset), place)
        self.advance(number)
        return self.builder.emit(Op.EXP, self.log(key.asset, number), place=place)

    def extreme(self, op: Op, key: LevelKey, place: Place | None) -> int:
        self.advance(self.number(key.time))
        return self.builder.emit(Op.EXP, self.extremes[op, key], place=place)

    def log(self, asset: int, number: int) -> int:
        if (asset, number) not in self.logs and number == 0:
            self.logs[asset, 0] = self.builder.leaf(Leaf(LeafKind.LOG_SPOT, asset=asset))
        return self.logs[asset, number]

    def advance(self, number: int) -> None:
        """Move every asset up to a grid date, and the extremes that are watched on the way."""
        while self.reached < number:
            self.reached += 1
            for row, asset in enumerate(self.assets):
                self._move(row, asset)
            drawn: dict[tuple[Op, int], int] = {}
            for op, key in sorted(self.covering[self.reached], key=lambda one: one[0]):  # minima before maxima
                if (op, key.asset) not in drawn:
                    drawn[op, key.asset] = self._bridge(op, key.asset, drawn.get((Op.LOW, key.asset)))
                self._join(op, key, drawn[op, key.asset])

    def _span(self) -> dict[str, float]:
        return {"start": self.times[self.reached - 1], "end": self.times[self.reached]}

    def _move(self, row: int, asset: int) -> None:
        emit, leaf = self.builder.emit, self.builder.leaf
        before = self.log(asset, self.reached - 1)
        log = emit(Op.ADD, before, leaf(Leaf(LeafKind.DRIFT, asset, **self._span())))
        for column, other in enumerate(self.assets[: row + 1]):
            factor = leaf(Leaf(LeafKind.FACTOR, asset, other, **self._span()))
            dimension = (self.reached - 1) * len(self.assets) + column
            log = emit(Op.STEP, log, factor, self.builder.input(Op.NORMAL, dimension))
        self.logs[asset, self.reached] = log

    def _bridge(self, op: Op, asset: int, low: int | None) -> int:
        """The extreme of this step, one uniform for all who watch this side of the asset; a maximum whose minimum is
        drawn already follows from the law of the range."""
        emit = self.builder.emit
        uniform = self.builder.input(Op.UNIFORM, self.uniforms)
        self.uniforms += 1
        variance = self.builder.leaf(Leaf(LeafKind.VARIANCE, asset, **self._span()))
        ends = self.log(asset, self.reached - 1), self.log(asset, self.reached)
        if low is None:
            return emit(Op.BRIDGE_LOW if op is Op.LOW else Op.BRIDGE_HIGH, *ends, variance, uniform)
        return emit(Op.ADD, low, emit(Op.BRIDGE_RANGE, *(emit(Op.SUB, end, low) for end in ends), variance, uniform))

    def _join(self, op: Op, key: LevelKey, drawn: int) -> None:
        before = self.extremes[op, key]
        joined = Op.MIN if op is Op.LOW else Op.MAX
        self.extremes[op, key] = drawn if before is None else self.builder.emit(joined, before, drawn)

    def unhit(self, chance: Unhit, levels: Sequence[int]) -> int:
        """The chance that no barrier is reached, given the levels on the grid: step by step."""
        active: dict[int, list[tuple[Op, int, int]]] = {}  # by the step's end: op, asset, level
        for one, level in zip(chance.barriers, levels, strict=True):
            for number in range(self.number(one.key.start) + 1, self.number(one.key.time) + 1):
                active.setdefault(number, []).append((one.op, one.key.asset, level))
        self.advance(max(active))
        factors = [self._step_unhit(number, tuple(dict.fromkeys(active[number])), chance.bound)
                   for number in sorted(active)]
        return self.builder.fold(Op.MUL, factors)

    def _step_unhit(self, number: int, barriers: tuple[tuple[Op, int, int], ...], bound: Bound) -> int:
        key = (number, barriers, bound)
        if key not in self._unhit:
            emit, fold = self.builder.emit, self.builder.fold
            assets = sorted({asset for _, asset, _ in barriers})
            parts = [self._asset_unhit(number, asset, barriers) for asset in assets]
            if bound is not Bound.LOWER:
                found = fold(Op.MIN, parts)
            elif len(parts) > 1:
                found = emit(Op.SUB, fold(Op.ADD, parts), self.builder.constant(len(parts) - 1.0))
                found = emit(Op.MAX, found, self.builder.constant(0.0))
            else:
                found = parts[0]
            self._unhit[key] = found
        return self._unhit[key]

    def _asset_unhit(self, number: int, asset: int, barriers: Sequence[tuple[Op, int, int]]) -> int:
        """The chance that one asset reaches neither its nearest barrier below nor its nearest above in a step."""
        emit, fold = self.builder.emit, self.builder.fold
        lows, highs = ([level for op, other, level in barriers if other == asset and op is side]
                       for side in (Op.LOW, Op.HIGH))
        span = {"start": self.times[number - 1], "end": self.times[number]}
        variance = self.builder.leaf(Leaf(LeafKind.VARIANCE, asset, **span))
        ends = [self.log(asset, number - 1), self.log(asset, number)]
        if not highs:
            low = emit(Op.LOG, fold(Op.MAX, lows))
            return emit(Op.BRIDGE_CLEAR, *(emit(Op.SUB, end, low) for end in ends), variance)
        high = emit(Op.LOG, fold(Op.MIN, highs))
        if not lows:
            return emit(Op.BRIDGE_CLEAR, *(emit(Op.SUB, high, end) for end in ends), variance)
        low = emit(Op.LOG, fold(Op.MAX, lows))
        distances = (emit(Op.SUB, end, low) for end in ends)
        return emit(Op.BRIDGE_CORRIDOR, *distances, emit(Op.SUB, high, low), variance)

    def moment(self, key: LevelKey, level: int) -> int:
        """Which part of the step that ends at a key's time has passed when the level is reached first.

        One normal and one uniform serve all steps of the tape: what is paid at a hit is a sum over steps, of which each
        has the right law.
        """
        emit, number = self.builder.emit, self.number(key.time)
        self.advance(number)
        assert self.number(key.start) == number - 1, "the stretch of a moment is one step"
        if self.pair is None:
            normal = self.builder.input(Op.NORMAL, self.steps * len(self.assets))
            self.pair = emit(Op.MUL, normal, normal), self.builder.input(Op.UNIFORM, self.uniforms)
            self.uniforms += 1
        square, uniform = self.pair
        log = emit(Op.LOG, level)
        ends = (emit(Op.SUB, self.log(key.asset, end), log) for end in (number - 1, number))
        variance = self.builder.leaf(Leaf(LeafKind.VARIANCE, key.asset, start=key.start, end=key.time))
        half = emit(Op.MUL, square, emit(Op.MUL, variance, self.builder.constant(0.5)))
        return emit(Op.BRIDGE_MOMENT, *ends, half, uniform)

    @property
    def steps(self) -> int:
        return len(self.times) - 1

    def step_of(self, dimension: int) -> int:
        """The step that a normal moves; 0 for that of the moments."""
        return dimension // len(self.assets) + 1 if dimension < self.steps * len(self.assets) else 0
