"""Which comparisons ask no more of an extreme than whether a barrier was reached, and which barrier.

`min(low / initial, ...) < 70%` says that some asset reached a level: the comparison is carried back through what rises
or falls with the extreme until it stands at the extreme itself.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from mcx.faults import Place
from mcx.tape.builder import Builder
from mcx.tape.formulas import Formulas
from mcx.tape.linear import ALWAYS, Linear, opposite, plain, product
from mcx.tape.ops import Op
from mcx.tape.program import Barrier, Instruction
from mcx.tape.rules import evaluate

PASSING = (Op.MIN, Op.MAX, Op.ADD, Op.SUB, Op.MUL, Op.DIV, Op.NEG, Op.EXP, Op.LOG)


@dataclass(frozen=True, slots=True)
class Level:
    """A number to compare with: what the contract makes it, and the value of the new tape that holds it."""

    number: float
    value: int


class Thresholds:
    """Reads comparisons of one tape into another. `values` holds what is made of the old values so far."""

    def __init__(self, instructions: Sequence[Instruction], fixed: Sequence[float | None], builder: Builder,
                 values: Sequence[Linear], drawn: frozenset[Barrier] = frozenset()):
        self.instructions, self.fixed, self.builder, self.values = instructions, fixed, builder, values
        self.drawn = drawn
        self.extremes: list[frozenset[Barrier]] = []  # by old value: the extremes that it still depends on openly

    def note(self, step: Instruction) -> frozenset[Barrier]:
        """Take in the next instruction; the extremes that its operands depend on openly."""
        if step.op in (Op.LOW, Op.HIGH):
            self.extremes.append(frozenset({Barrier(step.op, step.payload)}) - self.drawn)
            return frozenset()
        raw = frozenset().union(*(self.extremes[k] for k in step.operands))
        self.extremes.append(raw if self.passes_on(step) else frozenset())
        return raw

    def passes_on(self, step: Instruction) -> bool:
        """Whether a comparison of the result is one of the operands: what rises or falls with one, or joins several by
        their least or greatest."""
        if step.op not in PASSING:
            return False
        moving = sum(bool(self.extremes[k]) for k in step.operands)
        return step.op in (Op.MIN, Op.MAX) or (
            moving == 1 and all(self.extremes[k] or self.fixed[k] is not None for k in step.operands))

    def comparison(self, step: Instruction) -> Linear | None:
        """A comparison of what depends on extremes with a fixed number; None for any other."""
        left, right = step.operands
        strict = step.op is Op.LT
        if not self.extremes[right] and self.fixed[right] is not None:
            return self._below(left, self._level(right), strict, step.place)
        if not self.extremes[left] and self.fixed[left] is not None:
            found = self._below(right, self._level(left), not strict, step.place)
            return None if found is None else opposite(self.builder, found)
        return None

    def below(self, value: int, number: float) -> tuple[tuple[Barrier, int], ...]:
        """The barriers, each at its level, that decide whether a value is below a number; () where none do."""
        found = self._below(value, Level(number, self.builder.constant(number)), True, None) or {}
        events = [event for event in found if event]
        return tuple(events[0]) if len(events) == 1 else ()

    def _level(self, value: int) -> Level:
        return Level(self.fixed[value], plain(self.builder, self.values[value]))

    def _below(self, value: int, level: Level, strict: bool, place: Place | None) -> Linear | None:
        """Whether a value is below a level (at it too, if not strict)."""
        step, builder = self.instructions[value], self.builder
        if not self.extremes[value]:
            hard = plain(builder, self.values[value])
            return {ALWAYS: builder.emit(Op.LT if strict else Op.LE, hard, level.value, place=place)}
        match step.op:
            case Op.LOW | Op.HIGH if level.number <= 0.0:  # no level is
                return {ALWAYS: builder.constant(0.0)}
            case Op.LOW | Op.HIGH:
                event = frozenset({(Barrier(step.op, step.payload), level.value)})
                return opposite(builder, {event: builder.constant(1.0)}) if step.op is Op.LOW else {
                    event: builder.constant(1.0)}
            case Op.MIN | Op.MAX:
                parts = [self._below(k, level, strict, place) for k in step.operands]
                if None in parts:
                    return None
                if step.op is Op.MAX:
                    return product(builder, *parts, place)
                return opposite(builder, product(builder, *(opposite(builder, part) for part in parts), place))
        return self._carried_back(step, level, strict, place)

    def _carried_back(self, step: Instruction, level: Level, strict: bool, place: Place | None) -> Linear | None:
        """A comparison of a result as one of the operand that moves."""
        moving = next(k for k in step.operands if self.extremes[k])
        other = next((self._level(k) for k in step.operands if k != moving), None)
        first = moving == step.operands[0]
        falls = False
        match step.op:
            case Op.ADD:
                level = self._made(Op.SUB, level, other)
            case Op.SUB if first:
                level = self._made(Op.ADD, level, other)
            case Op.SUB:
                level, falls = self._made(Op.SUB, other, level), True
            case Op.NEG:
                level, falls = Level(-level.number, self.builder.emit(Op.NEG, level.value)), True
            case Op.MUL if other.number != 0.0:
                level, falls = self._made(Op.DIV, level, other), other.number < 0.0
            case Op.DIV if first and other.number != 0.0:
                level, falls = self._made(Op.MUL, level, other), other.number < 0.0
            case Op.LOG:
                level = Level(math.exp(level.number), self.builder.emit(Op.EXP, level.value))
            case Op.EXP if level.number > 0.0:
                level = Level(math.log(level.number), self.builder.emit(Op.LOG, level.value))
            case _:
                return None
        if not falls:
            return self._below(moving, level, strict, place)
        found = self._below(moving, level, not strict, place)
        return None if found is None else opposite(self.builder, found)

    def _made(self, op: Op, a: Level, b: Level) -> Level:
        return Level(float(evaluate(op, a.number, b.number)), self.builder.emit(op, a.value, b.value))


def thresholds_of(formulas: Formulas) -> Thresholds:
    """What reads the comparisons of a tape under construction, having noted what there is of it; into the same tape."""
    builder = formulas.builder
    found = Thresholds(builder.instructions, _Fixed(formulas), builder, _Same())
    for step in tuple(builder.instructions):
        found.note(step)
    return found


@dataclass(frozen=True)
class _Fixed:
    """The numbers of the contract behind values, looked up as they are asked for."""

    formulas: Formulas

    def __getitem__(self, value: int) -> float | None:
        return self.formulas.fixed(value)


class _Same:
    """Every value as it is."""

    def __getitem__(self, value: int) -> Linear:
        return {ALWAYS: value}
