"""Intervals that the values of a tape cannot leave, whatever the path, and how knowing one value narrows others.

`forward` gives the interval of an operation from those of its operands; `backward` what the interval of the result says
of the operands. Where something has no value (the log of a negative number, a division by exactly 0) nothing is said.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Callable, Iterator, Mapping, Sequence
from typing import TypeAlias

from mcx.checked.contract import Contract
from mcx.tape.formulas import figure
from mcx.tape.ops import Op
from mcx.tape.program import Instruction, LeafKind, Tape
from mcx.tape.rules import evaluate

Interval: TypeAlias = tuple[float, float]

ANYTHING: Interval = (-math.inf, math.inf)
POSITIVE: Interval = (0.0, math.inf)
YES, NO, EITHER = (1.0, 1.0), (0.0, 0.0), (0.0, 1.0)
MOST_VISITS = 16  # of one value while intervals narrow; stopping early leaves them wider, never wrong
ROUNDING = 1e-12  # relative: ends that cross by less have met


def _rising(op: Op) -> Callable[..., Interval]:
    """An operation that rises with each operand."""
    return lambda *parts: _ordered(float(evaluate(op, *(part[0] for part in parts))),
                                   float(evaluate(op, *(part[1] for part in parts))))


def _ordered(low: float, high: float) -> Interval:
    """The ends of an interval, an end that is not known at infinity."""
    return (-math.inf if math.isnan(low) else low, math.inf if math.isnan(high) else high)


def _add(a: Interval, b: Interval) -> Interval:
    return _ordered(a[0] + b[0], a[1] + b[1])


def _sub(a: Interval, b: Interval) -> Interval:
    return _ordered(a[0] - b[1], a[1] - b[0])


def _mul(a: Interval, b: Interval) -> Interval:
    ends = [0.0 if x == 0.0 or y == 0.0 else x * y for x in a for y in b]  # an infinite end is never reached
    return min(ends), max(ends)


def _div(a: Interval, b: Interval) -> Interval:
    if b[0] < 0.0 < b[1] or b == NO:
        return ANYTHING
    return _mul(a, (1.0 / b[1] if b[1] else -math.inf, 1.0 / b[0] if b[0] else math.inf))


def _neg(a: Interval) -> Interval:
    return -a[1], -a[0]


def _abs(a: Interval) -> Interval:
    return (0.0 if a[0] <= 0.0 <= a[1] else min(map(abs, a)), max(map(abs, a)))


def _pow(a: Interval, b: Interval) -> Interval:
    if a[0] >= 0.0:  # it rises or falls with each operand alone, so its extremes lie at corners
        ends = [float(evaluate(Op.POW, x, y)) for x in a for y in b]
        return ANYTHING if any(map(math.isnan, ends)) else (min(ends), max(ends))
    if b[0] != b[1] or b[0] != int(b[0]) or b[0] < 0.0:
        return ANYTHING
    return _pow(_abs(a), b) if b[0] % 2 == 0 else _ordered(a[0] ** b[0], a[1] ** b[0])


def _of_positive(op: Op) -> Callable[[Interval], Interval]:
    rule = _rising(op)
    return lambda a: ANYTHING if a[1] < 0.0 else rule((max(a[0], 0.0), a[1]))


def _lt(a: Interval, b: Interval) -> Interval:
    return YES if a[1] < b[0] else NO if a[0] >= b[1] else EITHER


def _le(a: Interval, b: Interval) -> Interval:
    return YES if a[1] <= b[0] else NO if a[0] > b[1] else EITHER


def _eq(a: Interval, b: Interval) -> Interval:
    if a[1] < b[0] or b[1] < a[0]:
        return NO
    return YES if a[0] == a[1] == b[0] == b[1] else EITHER


def _not(a: Interval) -> Interval:
    return 1.0 - a[1], 1.0 - a[0]


def _select(c: Interval, a: Interval, b: Interval) -> Interval:
    if c == NO:
        return b
    return a if c[0] > 0.0 else (min(a[0], b[0]), max(a[1], b[1]))


FORWARD: dict[Op, Callable[..., Interval]] = {
    Op.LEVEL: lambda: POSITIVE,
    Op.LOW: lambda: POSITIVE,
    Op.HIGH: lambda: POSITIVE,
    Op.NORMAL: lambda: ANYTHING,
    Op.UNIFORM: lambda: EITHER,
    Op.ADD: _add,
    Op.SUB: _sub,
    Op.MUL: _mul,
    Op.DIV: _div,
    Op.NEG: _neg,
    Op.POW: _pow,
    Op.MIN: lambda a, b: (min(a[0], b[0]), min(a[1], b[1])),
    Op.MAX: lambda a, b: (max(a[0], b[0]), max(a[1], b[1])),
    Op.ABS: _abs,
    Op.EXP: _rising(Op.EXP),
    Op.LOG: _of_positive(Op.LOG),
    Op.SQRT: _of_positive(Op.SQRT),
    Op.LT: _lt,
    Op.LE: _le,
    Op.EQ: _eq,
    Op.NE: lambda a, b: _not(_eq(a, b)),
    Op.AND: lambda a, b: (min(a[0], b[0]), min(a[1], b[1])),
    Op.OR: lambda a, b: (max(a[0], b[0]), max(a[1], b[1])),
    Op.NOT: _not,
    Op.SELECT: _select,
    Op.STEP: lambda x, s, z: _add(x, _mul(s, z)),
    Op.BRIDGE_LOW: lambda x0, x1, variance, u: (-math.inf, min(x0[1], x1[1])),
    Op.BRIDGE_HIGH: lambda x0, x1, variance, u: (max(x0[0], x1[0]), math.inf),
}

Narrower: TypeAlias = Callable[..., tuple[Interval, ...]]  # of the result and the operands: what the operands can be


def _below(result: Interval, a: Interval, b: Interval) -> tuple[Interval, ...]:
    """Of a < b and a <= b."""
    if result == YES:
        return (-math.inf, b[1]), (a[0], math.inf)
    return ((b[0], math.inf), (-math.inf, a[1])) if result == NO else ()


def _equal(result: Interval, a: Interval, b: Interval) -> tuple[Interval, ...]:
    return (b, a) if result == YES else ()


def _both(result: Interval, a: Interval, b: Interval) -> tuple[Interval, ...]:
    if result == YES:
        return YES, YES
    if result == NO and YES in (a, b):
        return (NO if b == YES else EITHER), (NO if a == YES else EITHER)
    return ()


def _either(result: Interval, a: Interval, b: Interval) -> tuple[Interval, ...]:
    return tuple(map(_not, _both(_not(result), _not(a), _not(b))))


def _chosen(result: Interval, c: Interval, a: Interval, b: Interval) -> tuple[Interval, ...]:
    if c == NO or a[0] > result[1] or a[1] < result[0]:
        return NO, ANYTHING, result
    if c[0] > 0.0 or b[0] > result[1] or b[1] < result[0]:
        return YES, result, ANYTHING
    return ()


def _fixed(part: Interval) -> bool:
    return part[0] == part[1] and math.isfinite(part[0])


def _term(result: Interval, a: Interval, b: Interval) -> tuple[Interval, ...]:
    return (_sub(result, b) if _fixed(b) else ANYTHING), (_sub(result, a) if _fixed(a) else ANYTHING)


def _factor(result: Interval, a: Interval, b: Interval) -> tuple[Interval, ...]:
    return tuple(_div(result, other) if _fixed(other) and other[0] else ANYTHING for other in (b, a))


BACKWARD: dict[Op, Narrower] = {
    Op.ADD: _term,
    Op.SUB: lambda r, a, b: ((_add(r, b) if _fixed(b) else ANYTHING), (_sub(a, r) if _fixed(a) else ANYTHING)),
    Op.MUL: _factor,
    Op.DIV: lambda r, a, b: ((_mul(r, b) if _fixed(b) else ANYTHING), ANYTHING),
    Op.NEG: lambda r, a: (_neg(r),),
    Op.MIN: lambda r, a, b: ((r[0], math.inf),) * 2,
    Op.MAX: lambda r, a, b: ((-math.inf, r[1]),) * 2,
    Op.LT: _below,
    Op.LE: _below,
    Op.EQ: _equal,
    Op.NE: lambda r, a, b: _equal(_not(r), a, b),
    Op.AND: _both,
    Op.OR: _either,
    Op.NOT: lambda r, a: (_not(r),),
    Op.SELECT: _chosen,
}


def result(step: Instruction, operands: Sequence[Interval]) -> Interval:
    """The interval of an instruction with operands; of the product of a value with itself that of its square."""
    if step.op is Op.MUL and step.operands[0] == step.operands[1]:
        operands = [_abs(part) for part in operands]
    return FORWARD[step.op](*operands)


class Impossible(Exception):
    """No path does what was assumed."""


class Intervals:
    """The interval of every value of a contract's tape, of which the contract's numbers are known."""

    def __init__(self, tape: Tape, contract: Contract):
        self.steps = tape.instructions
        self.whole: list[Interval] = []
        self.users: list[list[int]] = [[] for _ in self.steps]
        for number, step in enumerate(self.steps):
            self.whole.append(self._known(step, contract))
            for operand in step.operands:
                self.users[operand].append(number)

    def _known(self, step: Instruction, contract: Contract) -> Interval:
        if step.op is Op.CONSTANT:
            return step.payload, step.payload
        if step.op is Op.LEAF and step.payload.kind is LeafKind.TERM:
            value = figure(contract, step.payload)
            return value, value
        if step.op is Op.LEAF:
            return POSITIVE if step.payload.kind in (LeafKind.FORWARD, LeafKind.DISCOUNT) else ANYTHING
        return result(step, [self.whole[k] for k in step.operands])


class Case:
    """The intervals on the paths on which some values are known to lie in narrower ones."""

    def __init__(self, intervals: Intervals, narrower: Mapping[int, Interval] | None = None):
        self._intervals = intervals
        self._narrower = dict(narrower or {})

    def __getitem__(self, value: int) -> Interval:
        return self._narrower.get(value) or self._intervals.whole[value]

    def given(self, assumed: Mapping[int, Interval], until: int | None = None) -> Case | None:
        """The case in which values lie in these intervals as well; None where no path is in it. Values that stand after
        `until` on the tape are of no interest and keep the intervals they have."""
        case = Case(self._intervals, self._narrower)
        try:
            case._assume(assumed, len(self._intervals.steps) if until is None else until)
        except Impossible:
            return None
        return case

    def _assume(self, assumed: Mapping[int, Interval], until: int) -> None:
        changed: deque[int] = deque()
        visits: dict[int, int] = {}
        for value, interval in assumed.items():
            self._narrow(value, interval, changed)
        while changed:
            value = changed.popleft()
            visits[value] = visits.get(value, 0) + 1
            if visits[value] > MOST_VISITS:
                continue
            for number in (value, *self._intervals.users[value]):
                for other, interval in self._implied(number) if number <= until else ():
                    self._narrow(other, interval, changed)

    def _implied(self, number: int) -> Iterator[tuple[int, Interval]]:
        """What one instruction says of its result and its operands."""
        step = self._intervals.steps[number]
        if not step.operands:
            return
        operands = [self[k] for k in step.operands]
        yield number, result(step, operands)
        if step.op in BACKWARD:
            yield from zip(step.operands, BACKWARD[step.op](self[number], *operands), strict=False)

    def _narrow(self, value: int, interval: Interval, changed: deque[int]) -> None:
        held = self[value]
        low, high = max(held[0], interval[0]), min(held[1], interval[1])
        if low > high:
            if not low - high <= ROUNDING * max(abs(low), abs(high)):
                raise Impossible
            return
        if (low, high) != held:
            self._narrower[value] = (low, high)
            changed.append(value)
