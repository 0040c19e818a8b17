"""Levels become steps: the model's part of the tape.

The contract's tape reads levels at dates, and lowest and highest levels over watched stretches. Here each becomes a
walk of the logs over one common grid. Dates that nothing reads are no grid dates, so unobserved steps are merged; a
watched stretch is split at every node of a curve inside it, because the law of a bridge's extreme needs drift per unit
of variance to be constant within a step.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from mcx.faults import Place
from mcx.tape.builder import Builder
from mcx.tape.ops import Op
from mcx.tape.passes import drop_dead_code
from mcx.tape.program import Instruction, Leaf, LeafKind, LevelKey, Tape

SAME_TIME = 1e-9  # years: about 0.03 s; dates closer than that are one date, written in two ways


@dataclass(frozen=True, slots=True)
class Grid:
    """Times in years from the valuation date, the first 0, and the numbers of the assets that are simulated."""

    times: tuple[float, ...]
    assets: tuple[int, ...]


def expand_levels(tape: Tape, nodes: Sequence[float]) -> tuple[Tape, Grid]:
    """The tape with every LEVEL, LOW and HIGH made of normals and uniforms, without dead code, and its grid.

    Normals are numbered step by step, within a step by asset; asset i moves by its drift and by the normals of the
    assets up to itself times the lower-triangular factor of the step's covariance. `nodes` are the times of the
    market's curve points.
    """
    walk = _Walk(tape, nodes)
    values: list[int] = []
    for step in tape.instructions:
        if step.op is Op.LEVEL:
            values.append(walk.level(step.payload, step.place))
        elif step.op in (Op.LOW, Op.HIGH):
            values.append(walk.extreme(step.op, step.payload, step.place))
        elif step.op is Op.LOG and walk.is_later_level(tape.instructions[step.operands[0]]):
            values.append(walk.log_level(tape.instructions[step.operands[0]].payload))
        else:
            values.append(walk.builder.copy(step, tuple(values[k] for k in step.operands)))
    outputs = [output.at(values[output.value]) for output in tape.outputs]
    grid = Grid(tuple(walk.times), tuple(walk.assets))
    steps = len(grid.times) - 1
    return drop_dead_code(walk.builder.tape(outputs, steps * len(grid.assets), walk.uniforms)), grid


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


class _Walk:
    """The logs of the assets, moved along the grid as the tape asks for later and later dates."""

    def __init__(self, tape: Tape, nodes: Sequence[float]):
        levels = [step.payload for step in tape.instructions if step.op is Op.LEVEL]
        extremes = {(step.op, step.payload): None for step in tape.instructions if step.op in (Op.LOW, Op.HIGH)}
        self.times = grid_times(levels, (key for _, key in extremes), nodes)
        self._number = {time: number for number, time in enumerate(self.times)}
        self.assets = sorted({key.asset for key in levels if self.number(key.time)} | {k.asset for _, k in extremes})
        self.builder = Builder()
        self.uniforms = 0
        self.reached = 0
        self.logs: dict[tuple[int, int], int] = {}  # (asset, grid number) -> log level
        self.extremes: dict[tuple[Op, LevelKey], int | None] = extremes
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

    def is_later_level(self, step: Instruction) -> bool:
        return step.op is Op.LEVEL and self.number(step.payload.time) > 0

    def log_level(self, key: LevelKey) -> int:
        """The log of a level, which is where the level comes from."""
        number = self.number(key.time)
        self.advance(number)
        return self.log(key.asset, number)

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
            for op, key in self.covering[self.reached]:
                if (op, key.asset) not in drawn:
                    drawn[op, key.asset] = self._bridge(op, key.asset)
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

    def _bridge(self, op: Op, asset: int) -> int:
        """The extreme of this step, one uniform for all who watch this side of the asset."""
        uniform = self.builder.input(Op.UNIFORM, self.uniforms)
        self.uniforms += 1
        variance = self.builder.leaf(Leaf(LeafKind.VARIANCE, asset, **self._span()))
        ends = self.log(asset, self.reached - 1), self.log(asset, self.reached)
        bridge = Op.BRIDGE_LOW if op is Op.LOW else Op.BRIDGE_HIGH
        return self.builder.emit(bridge, *ends, variance, uniform)

    def _join(self, op: Op, key: LevelKey, drawn: int) -> None:
        before = self.extremes[op, key]
        joined = Op.MIN if op is Op.LOW else Op.MAX
        self.extremes[op, key] = drawn if before is None else self.builder.emit(joined, before, drawn)
