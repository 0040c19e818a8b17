"""What each operation means, as NumPy functions of its operands: the value rules.

A table over the closed list in `ops.py`, keyed by `Op`; every other meaning (adjoint, kernel) is another column or
another table over the same list. The interpreter, constant folding and the tests read this one; the kernel is tested
against it. Inputs, and what is replaced before a tape runs, have no rule.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from mcx.tape.bridges import (
    bridge_clear, bridge_corridor, bridge_moment, bridge_range, corridor_by_ends, corridor_by_start, corridor_by_width,
    lookup, range_by_start,
)
from mcx.tape.ops import Op

Value = np.ndarray | np.float64 | float


@dataclass(frozen=True, slots=True)
class Rule:
    """The meanings of one operation. `value(*operands)` works elementwise on scalars and arrays of lanes."""

    value: Callable[..., Value]


def _flag(condition: np.ndarray | np.bool_) -> Value:
    return np.multiply(condition, 1.0)


def _bridge_spread(x0: Value, x1: Value, variance: Value, u: Value) -> Value:
    return np.sqrt((x1 - x0) ** 2 - 2.0 * variance * np.log(u))


def bridge_low(x0: Value, x1: Value, variance: Value, u: Value) -> Value:
    """The minimum of a Brownian bridge from x0 to x1 with total `variance`, drawn by inversion of its law.

    P(min <= m) = exp(-2 (x0 - m)(x1 - m) / variance) for m <= min(x0, x1) (Glasserman 2003, section 6.4).
    """
    return 0.5 * (x0 + x1 - _bridge_spread(x0, x1, variance, u))


def bridge_high(x0: Value, x1: Value, variance: Value, u: Value) -> Value:
    """The maximum of the same bridge, by reflection."""
    return 0.5 * (x0 + x1 + _bridge_spread(x0, x1, variance, u))


RULES: dict[Op, Rule] = {
    Op.ADD: Rule(np.add),
    Op.SUB: Rule(np.subtract),
    Op.MUL: Rule(np.multiply),
    Op.DIV: Rule(np.divide),
    Op.NEG: Rule(np.negative),
    Op.POW: Rule(np.power),
    Op.MIN: Rule(np.minimum),
    Op.MAX: Rule(np.maximum),
    Op.ABS: Rule(np.abs),
    Op.EXP: Rule(np.exp),
    Op.LOG: Rule(np.log),
    Op.SQRT: Rule(np.sqrt),
    Op.LT: Rule(lambda a, b: _flag(np.less(a, b))),
    Op.LE: Rule(lambda a, b: _flag(np.less_equal(a, b))),
    Op.EQ: Rule(lambda a, b: _flag(np.equal(a, b))),
    Op.NE: Rule(lambda a, b: _flag(np.not_equal(a, b))),
    Op.AND: Rule(lambda a, b: _flag(np.logical_and(a, b))),
    Op.OR: Rule(lambda a, b: _flag(np.logical_or(a, b))),
    Op.NOT: Rule(lambda a: _flag(np.logical_not(a))),
    Op.SELECT: Rule(lambda c, a, b: np.where(np.not_equal(c, 0.0), a, b)[()]),
    Op.STEP: Rule(lambda x, s, z: x + s * z),
    Op.BRIDGE_LOW: Rule(bridge_low),
    Op.BRIDGE_HIGH: Rule(bridge_high),
    Op.BRIDGE_CLEAR: Rule(bridge_clear),
    Op.BRIDGE_CORRIDOR: Rule(bridge_corridor),
    Op.CORRIDOR_BY_START: Rule(corridor_by_start),
    Op.CORRIDOR_BY_WIDTH: Rule(corridor_by_width),
    Op.CORRIDOR_BY_ENDS: Rule(corridor_by_ends),
    Op.RANGE_BY_START: Rule(range_by_start),
    Op.BRIDGE_RANGE: Rule(bridge_range),
    Op.LOOKUP: Rule(lookup),
    Op.BRIDGE_MOMENT: Rule(bridge_moment),
}


def evaluate(op: Op, *operands: Value) -> Value:
    """The value of one operation; what is undefined (the log of a negative number) is nan, as on every path."""
    with np.errstate(all="ignore"):
        return RULES[op].value(*(np.asarray(operand, dtype=np.float64)[()] for operand in operands))
