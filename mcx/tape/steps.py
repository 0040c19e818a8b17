"""Levels become steps: the model's part of the tape.

The contract's tape reads levels at dates, lowest and highest levels over watched stretches, and chances that barriers
are not reached. Here each becomes a walk of the logs over one common grid. Dates that nothing reads are no grid dates,
so unobserved steps are merged; a watched stretch is split at every node of a curve inside it, because the law of a
bridge's extreme needs drift per unit of variance to be constant within a step.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field

from mcx.faults import Place
from mcx.tape.builder import Builder
from mcx.tape.ops import Op
from mcx.tape.passes import drop_dead_code, in_order_of_steps
from mcx.tape.program import Bound, Instruction, Leaf, LeafKind, LevelKey, Tape, Unhit

SAME_TIME = 1e-9  # years: about 0.03 s; dates closer than that are one date, written in two ways
LEAST_LEVEL = 1e-100  # of a barrier without its cash dividends: no bridge comes down to it


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
    exchange of the day the number of that rate; rates have numbers after those of the assets. `leaders`: for each asset
    whose log always moves by as much as that of one before it, the first such asset: all their bridges are one.
    """

    cash: Mapping[int, int] = field(default_factory=dict)
    ex: frozenset[tuple[int, float]] = frozenset()
    rates: Mapping[int, int] = field(default_factory=dict)
    leaders: Mapping[int, int] = field(default_factory=dict)


PLAIN = Makeup()


def expand_levels(tape: Tape, nodes: Sequence[float], makeup: Makeup = PLAIN, pieces: int = 1) -> tuple[Tape, Grid]:
    """The tape with every LEVEL, LOW, HIGH, UNHIT and MOMENT made of normals and uniforms, without dead code, and its
    grid.

    Normals are numbered step by step, within a step by asset; asset i moves by its drift and by the normals of the
    assets up to itself times the lower-triangular factor of the step's covariance. `nodes` are the times of the
    market's curve points. Where barriers of several assets are watched together, what they span is refined to at
    least that many `pieces`.
    """
    walk = _Walk(tape, nodes, makeup, pieces)
    values: list[int] = []
    for step in tape.instructions:
        if step.op is Op.LEVEL:
            values.append(walk.level(step.payload, step.place))
        elif step.op in (Op.LOW, Op.HIGH):
            values.append(walk.extreme(step.op, step.payload, step.place))
        elif step.op is Op.UNHIT:
            values.append(walk.unhit(step.payload, [values[k] for k in step.operands], step.place))
        elif step.op is Op.MOMENT:
            values.append(walk.moment(step.payload, values[step.operands[0]], step.place))
        elif step.op is Op.LOG and walk.is_later_level(tape.instructions[step.operands[0]]):
            values.append(walk.log_level(tape.instructions[step.operands[0]].payload))
        elif step.op is Op.LT and _is_inside(tape, *step.operands):
            values.append(walk.builder.constant(1.0))
        else:
            values.append(walk.builder.copy(step, tuple(values[k] for k in step.operands)))
    outputs = [output.at(values[output.value]) for output in tape.outputs]
    grid = Grid(tuple(walk.times), tuple(walk.assets))
    normals = walk.steps * len(grid.assets) + (walk.pair is not None)
    made = drop_dead_code(walk.builder.tape(outputs, normals, walk.uniforms))
    return in_order_of_steps(made, walk.step_of) if walk.chances else made, grid


def _is_inside(tape: Tape, part: int, end: int) -> bool:
    """Whether it is asked if a moment comes before the end of its step: one that is drawn always does."""
    return tape.instructions[part].op is Op.MOMENT and tape.instructions[end].payload == 1.0


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

    def __init__(self, tape: Tape, nodes: Sequence[float], makeup: Makeup, pieces: int):
        self.makeup = makeup
        levels = [step.payload for step in tape.instructions if step.op is Op.LEVEL]
        extremes = {(step.op, step.payload): None for step in tape.instructions if step.op in (Op.LOW, Op.HIGH)}
        self.places = {(step.op, step.payload.asset): step.place for step in reversed(tape.instructions)
                       if step.op in (Op.LOW, Op.HIGH)}
        chances = [step.payload for step in tape.instructions if step.op is Op.UNHIT]
        watched = {key for _, key in extremes} | {one.key for chance in chances for one in chance.barriers}
        watched |= {step.payload for step in tape.instructions if step.op is Op.MOMENT}
        together = {one.key for chance in chances if chance.bound is not Bound.EXACT for one in chance.barriers}
        times = grid_times(levels, watched, {*nodes, *_between(watched, makeup.cash)})
        self.times = refined(times, [(key.start, key.time) for key in together], pieces)
        self._number = {time: number for number, time in enumerate(self.times)}
        moving = {key.asset for key in levels if self.number(key.time)} | {key.asset for key in watched}
        self.assets = sorted(moving | {makeup.rates[asset] for asset in moving & set(makeup.rates)})
        self.ex = {(asset, self.number(when)) for asset, when in makeup.ex if self._is_grid_time(when)}
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
            drawn: dict[tuple[Op, int], int] = {}  # bridges alone
            reached: dict[tuple[Op, int], int] = {}
            for op, key in sorted(self.covering[self.reached], key=lambda one: one[0]):  # minima before maxima
                if (op, key.asset) not in drawn:
                    low = drawn.get((Op.LOW, key.asset))
                    drawn[op, key.asset] = self._bridge(op, key.asset, low)
                    reached[op, key.asset] = self._reached(op, key.asset, drawn[op, key.asset])
                self._join(op, key, reached[op, key.asset])

    def _span(self, number: int) -> dict[str, float]:
        return {"start": self.times[number - 1], "end": self.times[number]}

    def _move(self, row: int, asset: int) -> None:
        emit, leaf = self.builder.emit, self.builder.leaf
        before = self.log(asset, self.reached - 1)
        log = emit(Op.ADD, before, leaf(Leaf(LeafKind.DRIFT, asset, **self._span(self.reached))))
        for column, other in enumerate(self.assets[: row + 1]):
            factor = leaf(Leaf(LeafKind.FACTOR, asset, other, **self._span(self.reached)))
            dimension = (self.reached - 1) * len(self.assets) + column
            log = emit(Op.STEP, log, factor, self.builder.input(Op.NORMAL, dimension))
        self.logs[asset, self.reached] = log

    def _bridge(self, op: Op, asset: int, low: int | None) -> int:
        """The extreme of this step, one uniform for all who watch this side of the asset; a maximum whose minimum is
        drawn already follows from the law of the range."""
        emit = self.builder.emit
        uniform = self.builder.input(Op.UNIFORM, self.uniforms)
        self.uniforms += 1
        variance, ends = self._variance(asset, self.reached), self._bridge_ends(asset, self.reached)
        if low is None:
            return emit(Op.BRIDGE_LOW if op is Op.LOW else Op.BRIDGE_HIGH, *ends, variance, uniform)
        above = (emit(Op.SUB, end, low) for end in ends)
        return emit(Op.ADD, low, emit(Op.BRIDGE_RANGE, *above, variance, uniform, place=self.places[op, asset]))

    def _variance(self, asset: int, number: int) -> int:
        """The variance over the step that ends at a grid date, converted at the rate of the day where the asset is."""
        return self.builder.leaf(Leaf(LeafKind.VARIANCE, asset, self.makeup.rates.get(asset, -1), **self._span(number)))

    def _bridge_ends(self, asset: int, number: int) -> list[int]:
        """The logs between which the step that ends at a grid date is a bridge: it ends before a dividend."""
        before, after = (self._converted_log(asset, k) for k in (number - 1, number))
        if (asset, number) in self.ex:
            jump = self.builder.leaf(Leaf(LeafKind.JUMP, asset, end=self.times[number]))
            after = self.builder.emit(Op.SUB, after, jump)
        return [before, after]

    def _mean_escrow(self, asset: int, number: int) -> int:
        return self.builder.leaf(Leaf(LeafKind.MEAN_ESCROW, asset, **self._span(number), last=self.times[-1]))

    def _reached(self, op: Op, asset: int, bridge: int) -> int:
        """The extreme of this step, ex dates at its end included: of the log, or of the level itself where cash
        dividends are still to come; these enter at their mean over the step."""
        emit, joined = self.builder.emit, Op.MIN if op is Op.LOW else Op.MAX
        if asset in self.makeup.cash:
            ends = (self._level(asset, number) for number in (self.reached - 1, self.reached))
            level = emit(Op.ADD, emit(Op.EXP, bridge), self._mean_escrow(asset, self.reached))
            return self.builder.fold(joined, (level, *ends))
        if (asset, self.reached) in self.ex:
            return emit(joined, bridge, self._converted_log(asset, self.reached))
        return bridge

    def _join(self, op: Op, key: LevelKey, drawn: int) -> None:
        before = self.extremes[op, key]
        joined = Op.MIN if op is Op.LOW else Op.MAX
        self.extremes[op, key] = drawn if before is None else self.builder.emit(joined, before, drawn)

    def unhit(self, chance: Unhit, levels: Sequence[int], place: Place | None) -> int:
        """The chance that no barrier is reached, given the levels on the grid: step by step."""
        active: dict[int, list[tuple[Op, int, int]]] = {}  # by the step's end: op, asset, level
        for one, level in zip(chance.barriers, levels, strict=True):
            for number in range(self.number(one.key.start) + 1, self.number(one.key.time) + 1):
                active.setdefault(number, []).append((one.op, one.key.asset, level))
        self.advance(max(active))
        factors = [self._step_unhit(number, tuple(dict.fromkeys(active[number])), chance.bound, place)
                   for number in sorted(active)]
        return self.builder.fold(Op.MUL, factors)

    def _step_unhit(self, number: int, barriers: tuple[tuple[Op, int, int], ...], bound: Bound, place: Place | None
                    ) -> int:
        key = (number, barriers, bound)
        if key not in self._unhit:
            emit, fold = self.builder.emit, self.builder.fold
            bridges: dict[int, set[int]] = {}
            for asset in sorted({asset for _, asset, _ in barriers}):
                bridges.setdefault(self.makeup.leaders.get(asset, asset), set()).add(asset)
            parts = [self._bridge_unhit(number, assets, barriers, place) for assets in bridges.values()]
            if bound is not Bound.LOWER:
                found = fold(Op.MIN, parts)
            elif len(parts) > 1:
                found = emit(Op.SUB, fold(Op.ADD, parts), self.builder.constant(len(parts) - 1.0))
                found = emit(Op.MAX, found, self.builder.constant(0.0))
            else:
                found = parts[0]
            self._unhit[key] = found
        return self._unhit[key]

    def _bridge_unhit(self, number: int, assets: Iterable[int], barriers: Sequence[tuple[Op, int, int]],
                      place: Place | None) -> int:
        """The chance that the one bridge of some assets reaches neither the nearest barrier below nor the nearest above
        in a step. Where several assets move as one, their barriers are lines that keep their distance."""
        emit, fold = self.builder.emit, self.builder.fold
        first, *_ = assets = sorted(assets)
        below, above, clear = [], [], []  # of each asset: the log of its nearest level and the distances of its ends
        for asset in assets:
            lows, highs = ([level for op, other, level in barriers if other == asset and op is side]
                           for side in (Op.LOW, Op.HIGH))
            low, high = fold(Op.MAX, lows) if lows else None, fold(Op.MIN, highs) if highs else None
            ends = self._bridge_ends(asset, number)
            if low is not None:
                log = self._bridge_log(low, asset, number)
                below.append((asset, log, [emit(Op.SUB, end, log) for end in ends]))
            if high is not None:
                log = self._bridge_log(high, asset, number)
                above.append((asset, log, [emit(Op.SUB, log, end) for end in ends]))
            clear += [emit(Op.LT, *pair, place=place) for level in self._beside_the_bridge(asset, number)
                      for pair in ((low, level), (level, high)) if None not in pair]
        distances = [fold(Op.MIN, each) for each in zip(*(found for *_, found in below or above), strict=True)]
        if below and above:
            top, bottom = (fold(op, [self._beside(first, asset, log) for asset, log, _ in side])
                           for op, side in ((Op.MIN, above), (Op.MAX, below)))
            distances.append(emit(Op.SUB, top, bottom))
        chance = emit(Op.BRIDGE_CORRIDOR if below and above else Op.BRIDGE_CLEAR, *distances,
                      self._variance(first, number))
        return emit(Op.SELECT, fold(Op.AND, clear), chance, self.builder.constant(0.0)) if clear else chance

    def _beside(self, leader: int, asset: int, log: int) -> int:
        """A level of an asset in terms of another that moves as it does."""
        if asset == leader:
            return log
        return self.builder.emit(Op.ADD, self.builder.emit(Op.SUB, log, self.log(asset, 0)), self.log(leader, 0))

    def _bridge_log(self, level: int, asset: int, number: int) -> int:
        """Where a level stands for the bridge of a step: without the cash dividends to come, at their mean."""
        emit = self.builder.emit
        if asset in self.makeup.cash:
            level = emit(Op.SUB, level, self._mean_escrow(asset, number))
            level = emit(Op.MAX, level, self.builder.constant(LEAST_LEVEL))
        return emit(Op.LOG, level)

    def _beside_the_bridge(self, asset: int, number: int) -> list[int]:
        """Levels of the step that ends at a grid date that its bridge does not pass: both ends where cash dividends
        enter at their mean, the end where a dividend comes after the bridge."""
        if asset in self.makeup.cash:
            return [self._level(asset, number - 1), self._level(asset, number)]
        return [self._level(asset, number)] if (asset, number) in self.ex else []

    def moment(self, key: LevelKey, level: int, place: Place | None) -> int:
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
        ends = (emit(Op.SUB, end, log) for end in self._bridge_ends(key.asset, number))
        half = emit(Op.MUL, square, emit(Op.MUL, self._variance(key.asset, number), self.builder.constant(0.5)))
        return emit(Op.BRIDGE_MOMENT, *ends, half, uniform, place=place)

    @property
    def steps(self) -> int:
        return len(self.times) - 1

    def step_of(self, dimension: int) -> int:
        """The step that a normal moves; 0 for that of the moments."""
        return dimension // len(self.assets) + 1 if dimension < self.steps * len(self.assets) else 0
