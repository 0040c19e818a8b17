"""What each operation does to an adjoint: the derivative of the result by each operand, times the adjoint of the
result.

A table over the closed list in `ops.py`. A rule is written in the operations themselves, so that one table serves two
algebras: the builder of a tape, where it appends instructions, and plain numbers.

An operation may be undefined on a lane where nothing depends on it: a branch that was not taken, a contract that has
ended. The adjoint of its result is 0 there, and 0 times an infinite derivative would be NaN. So wherever a factor may
not be finite the product is chosen, not computed: `At.safe` is 0 where the adjoint is 0. Where two operands of a
minimum or maximum are equal the adjoint goes to the first; at 0 the derivative of a root is taken as 0, which matters
only where its operand stays 0 (the root of max(x, 0)).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np

from mcx.tape.ops import Op
from mcx.tape.rules import Value, evaluate


class Algebra(Protocol):
    """What a rule is written for: values of a tape under construction, or numbers."""

    def constant(self, number: float) -> Any: ...
    def emit(self, op: Op, *operands: Any) -> Any: ...


class Numbers:
    """The algebra of plain numbers, and of arrays of them."""

    def constant(self, number: float) -> Value:
        return np.float64(number)

    def emit(self, op: Op, *operands: Value) -> Value:
        return evaluate(op, *operands)


@dataclass(frozen=True, slots=True)
class Product:
    """`left * right`, or `left` alone: what one reader of a value adds to its adjoint."""

    left: Any
    right: Any = None


@dataclass(frozen=True, slots=True)
class At:
    """One instruction during the backward sweep: its operands, its value, the adjoint of the value, and whether its
    operands or its derivatives may be infinite or NaN on some lane."""

    algebra: Algebra
    operands: tuple[Any, ...]
    value: Any
    bar: Any
    risky: bool

    def emit(self, op: Op, *operands: Any) -> Any:
        return self.algebra.emit(op, *operands)

    def constant(self, number: float) -> Any:
        return self.algebra.constant(number)

    def safe(self, product: Any) -> Any:
        """A product with the adjoint: 0 where the adjoint is 0, whatever the other factor."""
        if not self.risky:
            return product
        return self.where(self.emit(Op.NE, self.bar, self.constant(0.0)), product)

    def where(self, flag: Any, value: Any) -> Any:
        return self.emit(Op.SELECT, flag, value, self.constant(0.0))

    def times(self, factor: Any) -> Product:
        if not self.risky:
            return Product(self.bar, factor)
        return Product(self.safe(self.emit(Op.MUL, self.bar, factor)))

    def minus(self, product: Any) -> Product:
        return Product(self.emit(Op.NEG, product))


Rule = Callable[[At], Product]


def _whole(at: At) -> Product:
    return Product(at.bar)


def _quotient(at: At) -> Any:
    return at.safe(at.emit(Op.DIV, at.bar, at.operands[1]))


def _divisor(at: At) -> Product:
    product = at.emit(Op.MUL, _quotient(at), at.value)
    return at.minus(at.safe(product))


def _base(at: At) -> Product:
    """p x^(p - 1), 0 at x = 0."""
    x, p = at.operands
    power = at.emit(Op.POW, x, at.emit(Op.SUB, p, at.constant(1.0)))
    product = at.safe(at.emit(Op.MUL, at.bar, at.emit(Op.MUL, p, power)))
    return Product(at.where(at.emit(Op.NE, x, at.constant(0.0)), product) if at.risky else product)


def _exponent(at: At) -> Product:
    """x^p log x, 0 where x is not positive."""
    x = at.operands[0]
    product = at.emit(Op.MUL, at.bar, at.emit(Op.MUL, at.value, at.emit(Op.LOG, x)))
    return Product(at.where(at.emit(Op.LT, at.constant(0.0), x), at.safe(product)))


def _chosen(compared: Op, x: int, y: int) -> Rule:
    """The adjoint where operands x and y compare so."""
    return lambda at: Product(at.where(at.emit(compared, at.operands[x], at.operands[y]), at.bar))


def _absolute(at: At) -> Product:
    negative = at.emit(Op.LT, at.operands[0], at.constant(0.0))
    return Product(at.emit(Op.SELECT, negative, at.emit(Op.NEG, at.bar), at.bar))


def _root(at: At) -> Product:
    product = at.emit(Op.DIV, at.emit(Op.MUL, at.bar, at.constant(0.5)), at.value)
    return Product(at.where(at.emit(Op.LT, at.constant(0.0), at.value), product) if at.risky else product)


def _taken(at: At) -> Product:
    return Product(at.where(at.operands[0], at.bar))


def _not_taken(at: At) -> Product:
    return Product(at.emit(Op.SELECT, at.operands[0], at.constant(0.0), at.bar))


def _half_over_root(at: At) -> Any:
    """For a bridge's extreme m = (x0 + x1 +- R) / 2 with R = sqrt((x1 - x0)^2 - 2 v log u): the adjoint over +-2 R,
    0 where R is 0 because there is neither move nor variance."""
    x0, x1, _, _ = at.operands
    root = at.emit(Op.SUB, at.emit(Op.ADD, at.value, at.value), at.emit(Op.ADD, x0, x1))  # +-R
    half = at.emit(Op.MUL, at.bar, at.constant(0.5))
    return at.where(at.emit(Op.NE, root, at.constant(0.0)), at.emit(Op.DIV, half, root))


def _bridge_end(with_move: Op) -> Rule:
    def rule(at: At) -> Product:
        move = at.emit(Op.SUB, at.operands[1], at.operands[0])
        half = at.emit(Op.MUL, at.bar, at.constant(0.5))
        return Product(at.emit(with_move, half, at.emit(Op.MUL, _half_over_root(at), move)))

    return rule


def _bridge_variance(at: At) -> Product:
    return at.minus(at.emit(Op.MUL, _half_over_root(at), at.emit(Op.LOG, at.operands[3])))


def _clear(at: At) -> Any:
    """The adjoint times 2 exp(-2 d0 d1 / v) / v where neither end has reached the barrier and there is a variance, else
    0: of the chance 1 - exp(-2 d0 d1 / v)."""
    d0, d1, variance = at.operands
    inside = at.emit(Op.LT, at.constant(0.0), at.emit(Op.MIN, at.emit(Op.MIN, d0, d1), variance))
    rest = at.emit(Op.SUB, at.constant(1.0), at.value)
    rest = at.emit(Op.MUL, at.emit(Op.ADD, rest, rest), at.bar)
    return at.where(inside, at.emit(Op.DIV, rest, variance))


def _clear_end(other: int) -> Rule:
    return lambda at: Product(_clear(at), at.operands[other])


def _clear_variance(at: At) -> Product:
    d0, d1, variance = at.operands
    divisor = at.emit(Op.MAX, variance, at.constant(np.finfo(float).tiny))
    return at.minus(at.emit(Op.DIV, at.emit(Op.MUL, _clear(at), at.emit(Op.MUL, d0, d1)), divisor))


def _by_start(at: At, swapped: bool = False) -> Any:
    d0, d1, *others = at.operands
    ends = (d1, d0) if swapped else (d0, d1)
    return at.emit(Op.CORRIDOR_BY_START, *ends, *others)


def _corridor_variance(at: At) -> Any:
    """The derivative by the variance from the others: the chance is the same in any unit of length."""
    d0, d1, width, variance = at.operands
    total = at.emit(Op.MUL, d0, _by_start(at))
    total = at.emit(Op.STEP, total, d1, _by_start(at, swapped=True))
    by_width = at.where(at.emit(Op.LT, width, at.constant(np.inf)), width)  # an upper barrier that is none
    total = at.emit(Op.STEP, total, by_width, at.emit(Op.CORRIDOR_BY_WIDTH, *at.operands))
    return at.emit(Op.DIV, total, _twice_negative(at, variance))


def _twice_negative(at: At, variance: Any) -> Any:
    """-2 times a variance, not 0: what it divides is 0 where there is none."""
    return at.emit(Op.MUL, at.emit(Op.MAX, variance, at.constant(np.finfo(float).tiny)), at.constant(-2.0))


def _bend_by_start(at: At) -> Any:
    """The second derivative of the corridor's chance by d0: the density of paths that stay inside solves the heat
    equation, so that it follows from the first ones, f00 = 2 fv - 2 f0 (d1 - d0) / v; `at` is CORRIDOR_BY_START."""
    d0, d1, _, variance = at.operands
    drift = at.emit(Op.DIV, at.emit(Op.MUL, at.value, at.emit(Op.SUB, d1, d0)), _twice_negative(at, variance))
    half = at.emit(Op.STEP, _corridor_variance(at), at.constant(2.0), drift)
    return at.emit(Op.ADD, half, half)


def _range_start(at: At, swapped: bool = False) -> Any:
    d0, d1, variance, _ = at.operands
    ends = (d1, d0) if swapped else (d0, d1)
    return at.emit(Op.RANGE_BY_START, *ends, variance, at.value)


def _range_variance(at: At) -> Product:
    """From the other derivatives: a range is a length, d0 r0 + d1 r1 + 2 v rv = r."""
    d0, d1, variance, _ = at.operands
    rest = at.emit(Op.SUB, at.emit(Op.MUL, d0, _range_start(at)), at.value)
    rest = at.emit(Op.STEP, rest, d1, _range_start(at, swapped=True))
    slope = at.emit(Op.DIV, rest, _twice_negative(at, variance))
    return at.times(at.where(at.emit(Op.LT, at.constant(0.0), variance), slope))


def _entry(number: int, last: int) -> Rule:
    """The adjoint of an entry of a table: where x counts it."""
    def rule(at: At) -> Product:
        x, constant = at.operands[0], at.constant
        found = at.bar
        if number < last:
            found = at.where(at.emit(Op.LT, x, constant(number + 1.0)), found)
        if number > 0:
            found = at.emit(Op.SELECT, at.emit(Op.LT, x, constant(float(number))), constant(0.0), found)
        return Product(found)

    return rule


_BRIDGE = (_bridge_end(Op.SUB), _bridge_end(Op.ADD), _bridge_variance, None)  # of u: nothing moves the draws

ADJOINTS: dict[Op, tuple[Rule | None, ...]] = {
    # arithmetic
    Op.ADD: (_whole, _whole),
    Op.SUB: (_whole, lambda at: at.minus(at.bar)),
    Op.MUL: (lambda at: at.times(at.operands[1]), lambda at: at.times(at.operands[0])),
    Op.DIV: (lambda at: Product(_quotient(at)), _divisor),
    Op.NEG: (lambda at: at.minus(at.bar),),
    Op.POW: (_base, _exponent),
    Op.MIN: (_chosen(Op.LE, 0, 1), _chosen(Op.LT, 1, 0)),
    Op.MAX: (_chosen(Op.LE, 1, 0), _chosen(Op.LT, 0, 1)),
    Op.ABS: (_absolute,),
    Op.EXP: (lambda at: at.times(at.value),),
    Op.LOG: (lambda at: Product(at.safe(at.emit(Op.DIV, at.bar, at.operands[0]))),),
    Op.SQRT: (_root,),
    # comparisons and logic: flat wherever they have a derivative
    Op.LT: (None, None),
    Op.LE: (None, None),
    Op.EQ: (None, None),
    Op.NE: (None, None),
    Op.AND: (None, None),
    Op.OR: (None, None),
    Op.NOT: (None,),
    Op.SELECT: (None, _taken, _not_taken),
    # the model
    Op.STEP: (_whole, lambda at: at.times(at.operands[2]), lambda at: at.times(at.operands[1])),
    Op.BRIDGE_LOW: _BRIDGE,
    Op.BRIDGE_HIGH: _BRIDGE,
    # continuous watching; the moment of a hit is drawn by a choice between two roots, so nothing flows through it
    Op.BRIDGE_CLEAR: (_clear_end(1), _clear_end(0), _clear_variance),
    Op.BRIDGE_CORRIDOR: (
        lambda at: at.times(_by_start(at)),
        lambda at: at.times(_by_start(at, swapped=True)),
        lambda at: at.times(at.emit(Op.CORRIDOR_BY_WIDTH, *at.operands)),
        lambda at: at.times(_corridor_variance(at)),
    ),
    Op.BRIDGE_RANGE: (
        lambda at: at.times(_range_start(at)),
        lambda at: at.times(_range_start(at, swapped=True)),
        _range_variance,
        None,
    ),
    Op.BRIDGE_MOMENT: (None, None, None, None),
    # second derivatives, which are taken by the spots alone: no width and no variance depends on them
    Op.CORRIDOR_BY_START: (
        lambda at: at.times(_bend_by_start(at)),
        lambda at: at.times(at.emit(Op.CORRIDOR_BY_ENDS, *at.operands)),
        None,
        None,
    ),
    Op.CORRIDOR_BY_WIDTH: (None, None, None, None),
    Op.CORRIDOR_BY_ENDS: (None, None, None, None),
    Op.RANGE_BY_START: (None, None, None, None),
}


def rules_of(op: Op, operands: int) -> tuple[Rule | None, ...]:
    """The rule of each operand; those of a LOOKUP are one for each entry of its table, and none for what counts them:
    it jumps there."""
    if op is Op.LOOKUP:
        return (None, *(_entry(number, operands - 2) for number in range(operands - 1)))
    return ADJOINTS.get(op, (None,) * operands)
