"""Simplifications that the builder makes at once: exact in IEEE arithmetic for finite values, or not made.

So `x * 1` is `x`, but `x * 0` stays (x may be infinite in a branch that is not taken) and nothing is reassociated.
Each rule gets the builder and the operands and answers with the number of an equal value, or None.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Protocol

from mcx.tape.ops import Op
from mcx.tape.program import Instruction


class Building(Protocol):
    """What a rule needs of the tape under construction."""

    instructions: Sequence[Instruction]

    def number(self, value: int) -> float | None: ...
    def constant(self, number: float) -> int: ...
    def emit(self, op: Op, *operands: int) -> int: ...


def _add(tape: Building, x: int, y: int) -> int | None:
    if tape.number(x) == 0.0:
        return y
    if tape.number(y) == 0.0:
        return x
    for one, other in ((x, y), (y, x)):
        if tape.instructions[one].op is Op.NEG:
            return tape.emit(Op.SUB, other, *tape.instructions[one].operands)
    return None


def _sub(tape: Building, x: int, y: int) -> int | None:
    if tape.number(y) == 0.0:
        return x
    if tape.instructions[y].op is Op.NEG:
        return tape.emit(Op.ADD, x, *tape.instructions[y].operands)
    return tape.emit(Op.NEG, y) if tape.number(x) == 0.0 else None


def _mul(tape: Building, x: int, y: int) -> int | None:
    for factor, other in ((x, y), (y, x)):
        if tape.number(factor) == 1.0:
            return other
        if tape.number(factor) == -1.0:
            return tape.emit(Op.NEG, other)
    return None


def _div(tape: Building, x: int, y: int) -> int | None:
    return x if tape.number(y) == 1.0 else None


def _pow(tape: Building, x: int, y: int) -> int | None:
    if tape.number(y) == 1.0:
        return x
    return tape.emit(Op.MUL, x, x) if tape.number(y) == 2.0 else None


def _twice_undone(op: Op) -> Callable[[Building, int], int | None]:
    def rule(tape: Building, x: int) -> int | None:
        inner = tape.instructions[x]
        return inner.operands[0] if inner.op is op else None

    return rule


def _same_is_itself(tape: Building, x: int, y: int) -> int | None:
    return x if x == y else None


def _same_is(value: float) -> Callable[[Building, int, int], int | None]:
    return lambda tape, x, y: tape.constant(value) if x == y else None


def _logic(absorbing: float) -> Callable[[Building, int, int], int | None]:
    def rule(tape: Building, x: int, y: int) -> int | None:
        for flag, other in ((x, y), (y, x)):
            known = tape.number(flag)
            if known is not None:
                return flag if known == absorbing else other
        return x if x == y else None

    return rule


def _select(tape: Building, c: int, a: int, b: int) -> int | None:
    known = tape.number(c)
    if known is not None:
        return a if known else b
    if a == b:
        return a
    condition = tape.instructions[c]
    if condition.op is Op.NOT:
        return tape.emit(Op.SELECT, condition.operands[0], b, a)
    match tape.number(a), tape.number(b):
        case (1.0, 0.0):
            return c
        case (0.0, 1.0):
            return tape.emit(Op.NOT, c)
    return None


SIMPLER: dict[Op, Callable[..., int | None]] = {
    Op.ADD: _add,
    Op.SUB: _sub,
    Op.MUL: _mul,
    Op.DIV: _div,
    Op.POW: _pow,
    Op.NEG: _twice_undone(Op.NEG),
    Op.NOT: _twice_undone(Op.NOT),
    Op.MIN: _same_is_itself,
    Op.MAX: _same_is_itself,
    Op.LT: _same_is(0.0),
    Op.NE: _same_is(0.0),
    Op.LE: _same_is(1.0),
    Op.EQ: _same_is(1.0),
    Op.AND: _logic(0.0),
    Op.OR: _logic(1.0),
    Op.SELECT: _select,
}
