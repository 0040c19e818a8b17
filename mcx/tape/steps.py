"""Levels become steps: the model's part of the tape.

The contract's tape reads levels at dates, and lowest and highest levels over watched stretches. Here each becomes a
walk of the logs over one common grid. Dates that nothing reads are no grid dates, so unobserved steps are merged; a
watched stretch is split at every node of a curve inside it, because the law of a bridge's extreme needs drift per unit
of variance to be constant within a step.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field

from mcx.faults import Place
from mcx.tape.builder import Builder
from mcx.tape.ops import Op
from mcx.tape.passes import drop_dead_code
from mcx.tape.program import Instruction, Leaf, LeafKind, LevelKey, Tape

SAME_TIME = 1e-9  # years: about 0.03 s; dates closer than that are one date, written in two ways


@dataclass(frozen=True, slots=True)
class Grid:
    """Times in years from the valuation date, the first 0, and the numbers of what is simulated: assets, then rates of
    exchange."""

    times: tuple[float, ...]
    assets: tuple[int, ...]


@dataclass(frozen=True, slots=True)
class Makeup:
    """How levels are made of the lognormal values that are simulated.

    `cash`: assets with cash dividends to come, whose level is the simulated part plus the escrow, and into how many
    steps a year a watched stretch of theirs is divided at least, since the escrow enters at its mean. `ex`: assets and
    times at which a dividend takes a share of the level. `rates`: for each asset that is converted at the rate of
    exchange of the day the number of that rate; rates have numbers after those of the assets.
    """

    cash: Mapping[int, int] = field(default_factory=dict)
    ex: frozenset[tuple[int, float]] = frozenset()
    rates: Mapping[int, int] = field(default_factory=dict)


PLAIN = Makeup()


def expand_levels(tape: Tape, nodes: Sequence[float], makeup: Makeup = PLAIN) -> tuple[Tape, Grid]:
    """The tape with every LEVEL, LOW and HIGH made of normals and uniforms, without dead code, and its grid.

    Normals are numbered step by step, within a step by asset; asset i moves by its drift and by the normals of the
    assets up to itself times the lower-triangular factor of the step's covariance. `nodes` are the times of the
    market's curve points.
    """
    walk = _Walk(tape, nodes, makeup)
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


def _between(watched: Iterable[LevelKey], often: Mapping[int, int]) -> set[float]:
    """Times inside the watched stretches of assets with cash dividends, as many a year as these need."""
    return {step / count for key in watched if (count := often.get(key.asset))
            for step in range(math.ceil(key.start * count), math.floor(key.time * count) + 1)}


class _Walk:
    """The logs of the assets, moved along the grid as the tape asks for later and later dates."""

    def __init__(self, tape: Tape, nodes: Sequence[float], makeup: Makeup):
        self.makeup = makeup
        levels = [step.payload for step in tape.instructions if step.op is Op.LEVEL]
        extremes = {(step.op, step.payload): None for step in tape.instructions if step.op in (Op.LOW, Op.HIGH)}
        watched = [key for _, key in extremes]
        self.times = grid_times(levels, watched, {*nodes, *_between(watched, makeup.cash)})
        self._number = {time: number for number, time in enumerate(self.times)}
        moving = {key.asset for key in levels if self.number(key.time)} | {key.asset for _, key in extremes}
        self.assets = sorted(moving | {makeup.rates[asset] for asset in moving & set(makeup.rates)})
        self.ex = {(asset, self.number(when)) for asset, when in makeup.ex if self._is_grid_time(when)}
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
        self.advance(number)
        return self._level(key.asset, number, place)

    def is_later_level(self, step: Instruction) -> bool:
        """Whether an instruction reads a level that is the exponential of a log."""
        return (step.op is Op.LEVEL and self.number(step.payload.time) > 0
                and step.payload.asset not in self.makeup.cash)

    def log_level(self, key: LevelKey) -> int:
        """The log that such a level is the exponential of."""
        number = self.number(key.time)
        self.advance(number)
        return self._converted_log(key.asset, number)

    def extreme(self, op: Op, key: LevelKey, place: Place | None) -> int:
        self.advance(self.number(key.time))
        found = self.extremes[op, key]
        return found if key.asset in self.makeup.cash else self.builder.emit(Op.EXP, found, place=place)

    def _level(self, asset: int, number: int, place: Place | None = None) -> int:
        """The level of an asset on a grid date."""
        if number == 0:  # the spot itself, to the last digit: its log and back would miss a barrier at the spot
            return self.builder.leaf(Leaf(LeafKind.FORWARD, asset=asset), place)
        emit = self.builder.emit
        if asset not in self.makeup.cash:
            return emit(Op.EXP, self._converted_log(asset, number), place=place)
        escrow = self.builder.leaf(Leaf(LeafKind.ESCROW, asset, end=self.times[number], last=self.times[-1]))
        level = emit(Op.ADD, emit(Op.EXP, self.log(asset, number), place=place), escrow, place=place)
        if asset not in self.makeup.rates:
            return level
        rate = emit(Op.EXP, self.log(self.makeup.rates[asset], number), place=place)
        return emit(Op.MUL, level, rate, place=place)

    def _converted_log(self, asset: int, number: int) -> int:
        """The log of an asset's level in the contract's currency, without cash dividends to come."""
        log = self.log(asset, number)
        if asset not in self.makeup.rates:
            return log
        return self.builder.emit(Op.ADD, log, self.log(self.makeup.rates[asset], number))

    def _is_grid_time(self, time: float) -> bool:
        return time in self._number or any(abs(known - time) <= SAME_TIME for known in self.times)

    def log(self, asset: int, number: int) -> int:
        if (asset, number) not in self.logs and number == 0:
            last = self.times[-1] if asset in self.makeup.cash else 0.0
            self.logs[asset, 0] = self.builder.leaf(Leaf(LeafKind.LOG_SPOT, asset=asset, last=last))
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
                    drawn[op, key.asset] = self._extreme(op, key.asset)
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
        variance = self.builder.leaf(Leaf(LeafKind.VARIANCE, asset, self.makeup.rates.get(asset, -1), **self._span()))
        before, after = (self._converted_log(asset, number) for number in (self.reached - 1, self.reached))
        if (asset, self.reached) in self.ex:  # the bridge ends before the dividend
            jump = self.builder.leaf(Leaf(LeafKind.JUMP, asset, end=self.times[self.reached]))
            after = self.builder.emit(Op.SUB, after, jump)
        bridge = Op.BRIDGE_LOW if op is Op.LOW else Op.BRIDGE_HIGH
        return self.builder.emit(bridge, before, after, variance, uniform)

    def _extreme(self, op: Op, asset: int) -> int:
        """The extreme of this step, ex dates at its end included: of the log, or of the level itself where cash
        dividends are still to come; these enter at their mean over the step."""
        emit, joined = self.builder.emit, Op.MIN if op is Op.LOW else Op.MAX
        bridge = self._bridge(op, asset)
        if asset in self.makeup.cash:
            mean = self.builder.leaf(Leaf(LeafKind.MEAN_ESCROW, asset, **self._span(), last=self.times[-1]))
            ends = (self._level(asset, number) for number in (self.reached - 1, self.reached))
            return self.builder.fold(joined, (emit(Op.ADD, emit(Op.EXP, bridge), mean), *ends))
        if (asset, self.reached) in self.ex:
            return emit(joined, bridge, self._converted_log(asset, self.reached))
        return bridge

    def _join(self, op: Op, key: LevelKey, drawn: int) -> None:
        before = self.extremes[op, key]
        joined = Op.MIN if op is Op.LOW else Op.MAX
        self.extremes[op, key] = drawn if before is None else self.builder.emit(joined, before, drawn)
