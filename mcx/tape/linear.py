"""Sums of coefficients times events 'no barrier of this set was reached', and the operations that keep their form.

A value is a dict from sets of barriers to coefficients, which are values of the tape; the empty set always happens, so
that a plain value is one coefficient of it. Two events together are the event of the joined set. All functions take
the builder of the tape that the coefficients live on.
"""

from __future__ import annotations

from typing import TypeAlias

from mcx.faults import Place
from mcx.tape.builder import Builder
from mcx.tape.ops import OPS, Op
from mcx.tape.program import Barrier

Event: TypeAlias = frozenset[tuple[Barrier, int]]  # barriers, each at a level (a value of the tape)
Linear: TypeAlias = dict[Event, int]
ALWAYS: Event = frozenset()


def is_plain(value: Linear) -> bool:
    """Whether no event enters."""
    return not value or (len(value) == 1 and ALWAYS in value)


def plain(builder: Builder, value: Linear) -> int:
    """The coefficient of what always happens."""
    return value.get(ALWAYS) if ALWAYS in value else builder.constant(0.0)


def add(builder: Builder, a: Linear, b: Linear, place: Place | None = None) -> Linear:
    """a + b"""
    joined = _without_zeros(builder, a)
    for event, factor in _without_zeros(builder, b).items():
        joined[event] = builder.emit(Op.ADD, joined[event], factor, place=place) if event in joined else factor
    return _without_zeros(builder, joined)


def negative(builder: Builder, a: Linear) -> Linear:
    """-a"""
    return {event: builder.emit(Op.NEG, factor) for event, factor in a.items()}


def opposite(builder: Builder, a: Linear) -> Linear:
    """1 - a: `not` of a flag."""
    rest = {event: builder.emit(Op.NEG, factor) for event, factor in a.items() if event}
    held = plain(builder, a)
    if is_flag(builder, held):
        return _without_zeros(builder, {ALWAYS: builder.emit(Op.NOT, held), **rest})
    return _without_zeros(builder, {ALWAYS: builder.emit(Op.SUB, builder.constant(1.0), held), **rest})


def product(builder: Builder, a: Linear, b: Linear, place: Place | None = None) -> Linear:
    """a * b; of flags, `and`."""
    joined: Linear = {}
    for one, left in a.items():
        for other, right in b.items():
            event, factor = one | other, times(builder, left, right, place)
            joined[event] = builder.emit(Op.ADD, joined[event], factor, place=place) if event in joined else factor
    return _without_zeros(builder, joined)


def choice(builder: Builder, c: Linear, a: Linear, b: Linear, place: Place | None = None) -> Linear:
    """a where c, else b."""
    if is_plain(c):
        nothing, flag = builder.constant(0.0), plain(builder, c)
        return _without_zeros(builder, {
            event: builder.emit(Op.SELECT, flag, a.get(event, nothing), b.get(event, nothing), place=place)
            for event in (*a, *(event for event in b if event not in a))})
    if builder.number(plain(builder, c)) == 1.0:  # so that what the flag rules out cancels now, not on each path
        return choice(builder, opposite(builder, c), b, a, place)
    return add(builder, b, product(builder, c, add(builder, a, negative(builder, b), place), place), place)


def times(builder: Builder, a: int, b: int, place: Place | None = None) -> int:
    """a * b; where one is a flag it chooses, so that what is not finite where the flag is down does no harm."""
    for flag, other in ((a, b), (b, a)):
        if builder.number(flag) is None and builder.number(other) is None:
            if is_flag(builder, flag) and not is_flag(builder, other):
                return builder.emit(Op.SELECT, flag, other, builder.constant(0.0), place=place)
            if is_flag(builder, flag):
                return builder.emit(Op.AND, flag, other, place=place)
            step = builder.instructions[flag]
            if step.op is Op.NEG and is_flag(builder, step.operands[0]):
                return builder.emit(Op.NEG, times(builder, step.operands[0], other, place))
    return builder.emit(Op.MUL, a, b, place=place)


def is_flag(builder: Builder, value: int) -> bool:
    """Whether a value is a flag by its operation alone."""
    step = builder.instructions[value]
    return OPS[step.op].flag or builder.number(value) in (0.0, 1.0)


def _without_zeros(builder: Builder, value: Linear) -> Linear:
    return {event: factor for event, factor in value.items() if builder.number(factor) != 0.0}
