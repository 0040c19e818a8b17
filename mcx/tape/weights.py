"""Flags of continuous watches as probabilities: decided on the tape, exact where one asset is watched at a time.

A flag that only payments depend on need not be drawn. Every value that depends on such flags is held as a sum of
coefficients, each times the event that no barrier of a set was reached: `not` is 1 less it, products join the sets,
and a choice between a and b is b + c (a - b). At the outputs each event becomes its probability given the levels at
the dates (UNHIT), with far less variance than a drawn flag. The coefficients may depend on those levels only: what an
extreme enters in any other way is drawn, and so is every flag whose stretch meets that of a drawn extreme.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from types import MappingProxyType

from mcx.tape.builder import Builder
from mcx.tape.ops import Op
from mcx.tape.passes import drop_dead_code
from mcx.tape.program import Barrier, Bound, Instruction, Output, Tape, Unhit
from mcx.tape.linear import ALWAYS, Linear, add, choice, is_plain, negative, opposite, plain, product, times
from mcx.tape.thresholds import Thresholds

MOST_SETS = 1024  # of barriers in one value; beyond it the flags are drawn


@dataclass(frozen=True, slots=True)
class Weighted:
    """A tape whose flags are probabilities where that is exact or bracketed.

    bracketed   barriers of several assets that one payment depends on at a time
    drawn       barriers and extremes that are still drawn
    joined      barriers of several assets that move as one, so that they have the law of one asset
    """

    tape: Tape
    bracketed: frozenset[Barrier]
    drawn: frozenset[Barrier]
    joined: frozenset[Barrier]


def weigh(tape: Tape, fixed: Sequence[float | None], everything_drawn: bool = False,
          leaders: Mapping[int, int] = MappingProxyType({})) -> Weighted:
    """The tape with flags as probabilities. `fixed` gives for each value the number that the contract makes it, or
    None; `everything_drawn` leaves every flag as it is; `leaders` says which assets move as one (`steps.Makeup`)."""
    extremes = frozenset(Barrier(step.op, step.payload) for step in tape.instructions if step.op in (Op.LOW, Op.HIGH))
    drawn = extremes if everything_drawn else frozenset()
    while extremes - drawn:
        walk = _Walk(tape, fixed, drawn, leaders)
        walk.along()
        more = walk.drawn | _meeting(walk.drawn, extremes)
        if more == drawn:
            return walk.done()
        drawn = more
    return Weighted(tape, frozenset(), drawn, frozenset())


def _meeting(drawn: Iterable[Barrier], extremes: Iterable[Barrier]) -> frozenset[Barrier]:
    """Those whose stretch has a part in common with a drawn one."""
    taken = [(one.key.start, one.key.time) for one in drawn]
    return frozenset(one for one in extremes
                     if any(one.key.start < end and start < one.key.time for start, end in taken))


class _Walk:
    """One attempt, with some extremes known to be drawn; finds out which others must be."""

    def __init__(self, tape: Tape, fixed: Sequence[float | None], drawn: frozenset[Barrier],
                 leaders: Mapping[int, int]):
        self.tape, self.drawn, self.leaders = tape, drawn, leaders
        self.builder = Builder()
        self.values: list[Linear] = []
        self.thresholds = Thresholds(tape.instructions, fixed, self.builder, self.values, drawn)
        self.bracketed: set[Barrier] = set()
        self.joined: set[Barrier] = set()
        self.places = {Barrier(step.op, step.payload): step.place for step in reversed(tape.instructions)
                       if step.op in (Op.LOW, Op.HIGH)}

    def along(self) -> None:
        for step in self.tape.instructions:
            value = self._value(step)
            if len(value) > MOST_SETS:
                self._draw(value)
            self.values.append(value)
        for output in self.tape.outputs:
            self.drawn |= self.thresholds.extremes[output.value]

    def _draw(self, *values: Linear) -> None:
        self.drawn |= {barrier for value in values for event in value for barrier, _ in event}

    def _value(self, step: Instruction) -> Linear:
        operands = [self.values[k] for k in step.operands]
        raw = self.thresholds.note(step)
        if raw and step.op in (Op.LT, Op.LE):
            found = self.thresholds.comparison(step)
            if found is not None:
                return found
        if raw and not self.thresholds.passes_on(step):
            self.drawn |= raw
        if all(is_plain(operand) for operand in operands):
            return self._plain(step, operands)
        found = self._linear(step, operands)
        if found is None:
            self._draw(*operands)
            return self._plain(step, operands)
        return found

    def _plain(self, step: Instruction, operands: Sequence[Linear]) -> Linear:
        return {ALWAYS: self.builder.copy(step, tuple(plain(self.builder, each) for each in operands))}

    def _linear(self, step: Instruction, operands: Sequence[Linear]) -> Linear | None:
        """The value of an operation that keeps sums of events, None where it does not."""
        builder, place = self.builder, step.place
        hard = [is_plain(operand) for operand in operands]
        match step.op:
            case Op.ADD:
                return add(builder, *operands, place)
            case Op.SUB:
                return add(builder, operands[0], negative(builder, operands[1]), place)
            case Op.NEG:
                return negative(builder, operands[0])
            case Op.NOT:
                return opposite(builder, operands[0])
            case Op.MUL | Op.AND:
                return product(builder, *operands, place)
            case Op.OR:
                return opposite(builder, product(builder, *(opposite(builder, each) for each in operands), place))
            case Op.DIV if hard[1]:
                below = plain(builder, operands[1])
                return {event: builder.emit(Op.DIV, factor, below, place=place)
                        for event, factor in operands[0].items()}
            case Op.SELECT:
                return choice(builder, *operands, place)
        return None

    def done(self) -> Weighted:
        """The outputs of the walk, as numbers."""
        outputs: list[Output] = []
        gaps: list[Output] = []
        for output in self.tape.outputs:
            value = self.values[output.value]
            if is_plain(value):
                outputs.append(output.at(plain(self.builder, value)))
                continue
            parts, others = (self._expected(value, bound) for bound in (Bound.LOWER, Bound.UPPER))
            if parts != others:
                low, high = (self.builder.fold(Op.ADD, each) for each in (parts, others))
                gaps.append(Output.of("gap", self.builder.emit(Op.SUB, high, low), output.name))
                parts = self._middle(parts, others)
            outputs.append(replace(output, value=self.builder.fold(Op.ADD, parts), flag=False))
        tape = drop_dead_code(self.builder.tape([*outputs, *gaps]))
        return Weighted(tape, frozenset(self.bracketed), self.drawn, frozenset(self.joined))

    def _middle(self, parts: Sequence[int], others: Sequence[int]) -> list[int]:
        """The mean of two sums, still as a sum of payments."""
        half = self.builder.constant(0.5)
        shared = [part for part in parts if part in others]
        apart = [part for part in (*parts, *others) if part not in shared]
        return shared + [self.builder.emit(Op.MUL, part, half) for part in apart]

    def _expected(self, value: Linear, bound: Bound) -> list[int]:
        """What the value is the sum of, with every event as its probability; where that is known between bounds only,
        at its lower or upper end: a negative coefficient takes the other bound."""
        emit, nothing = self.builder.emit, self.builder.constant(0.0)
        other = Bound.UPPER if bound is Bound.LOWER else Bound.LOWER
        parts: list[int] = []
        for event, factor in value.items():
            barriers = tuple(sorted(event, key=lambda pair: pair[0].order))
            if not barriers:
                parts.append(factor)
            elif not _together((barrier for barrier, _ in barriers), self.leaders):
                if _together(barrier for barrier, _ in barriers):
                    self.joined |= {barrier for barrier, _ in barriers}
                parts.append(times(self.builder, factor, self._unhit(barriers, Bound.EXACT)))
            else:
                self.bracketed |= {barrier for barrier, _ in barriers}
                for op, which in ((Op.MAX, bound), (Op.MIN, other)):
                    part = emit(op, factor, nothing)
                    if self.builder.number(part) != 0.0:
                        parts.append(times(self.builder, part, self._unhit(barriers, which)))
        return parts

    def _unhit(self, barriers: Sequence[tuple[Barrier, int]], bound: Bound) -> int:
        payload = Unhit(tuple(barrier for barrier, _ in barriers), bound)
        place = next((self.places[barrier] for barrier, _ in barriers if self.places[barrier]), None)
        return self.builder.keyed(Op.UNHIT, tuple(level for _, level in barriers), payload, place)


def _together(barriers: Iterable[Barrier], leaders: Mapping[int, int] = MappingProxyType({})) -> bool:
    """Whether barriers of different assets are watched at one time, of assets that do not move as one."""
    stretches = sorted((one.key.start, one.key.time, leaders.get(one.key.asset, one.key.asset)) for one in barriers)
    latest: dict[int, float] = {}
    for start, end, asset in stretches:
        if any(start < until for other, until in latest.items() if other != asset):
            return True
        latest[asset] = max(end, latest.get(asset, -math.inf))
    return False

