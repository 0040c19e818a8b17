"""The closed list of operations of the tape: arity and printed form; `rules.py` holds their meaning.

A value of the tape is one float64 for each path. Flags are 0.0 and 1.0. Every other module that gives the operations
a meaning (value, adjoint, smoothness, kernel) is a table over this list, and a test demands that each is complete.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import IntEnum


class Op(IntEnum):
    """What an instruction does. The numbers are read by the kernel; append, never renumber in passing."""

    # inputs
    CONSTANT = 0
    LEAF = 1  # a scalar that the model or the contract gives: drift, factor, discount, initial level, term
    LEVEL = 2  # the level of an asset at a date; replaced by steps before the tape runs
    LOW = 3  # the lowest level of an asset since the previous grid date, watched continuously; likewise replaced
    HIGH = 4
    NORMAL = 5  # a standard normal of the draws
    UNIFORM = 6  # a uniform of the draws, for a bridge
    # arithmetic
    ADD = 10
    SUB = 11
    MUL = 12
    DIV = 13
    NEG = 14
    POW = 15
    MIN = 16
    MAX = 17
    ABS = 18
    EXP = 19
    LOG = 20
    SQRT = 21
    # comparisons and logic: 0.0 or 1.0
    LT = 30
    LE = 31
    EQ = 32
    NE = 33
    AND = 34
    OR = 35
    NOT = 36
    SELECT = 37  # a if c else b, operands (c, a, b)
    # the model
    STEP = 40  # x + s * z: one asset's log level moved by one normal times one factor; operands (x, s, z)
    BRIDGE_LOW = 41  # minimum of a Brownian bridge; operands (x0, x1, variance, u)
    BRIDGE_HIGH = 42
    # continuous watching
    UNHIT = 50  # chance that no barrier of a set is reached, given the levels at the dates; replaced before it runs
    MOMENT = 51  # which part of a stretch has passed when a barrier is reached first, given that it is; likewise
    BRIDGE_CLEAR = 52  # chance that a bridge does not reach a barrier; operands (d0, d1, variance), distances from it
    BRIDGE_CORRIDOR = 53  # likewise of two barriers; operands (d0, d1, width, variance), d0 and d1 from the lower
    BRIDGE_RANGE = 54  # maximum less minimum of a bridge, given the minimum; operands (d0, d1, variance, u)
    LOOKUP = 55  # the entry that the whole part of x counts; operands (x, entries...), entries the same on every path
    BRIDGE_MOMENT = 56  # which part of a step has passed at its hit; operands (d0, d1, normal^2 variance / 2, u)
    # derivatives of the laws above that have no short form
    CORRIDOR_BY_START = 57  # of BRIDGE_CORRIDOR by d0; the same operands
    CORRIDOR_BY_WIDTH = 58  # by the width
    CORRIDOR_BY_ENDS = 59  # by d0 and d1
    RANGE_BY_START = 60  # of BRIDGE_RANGE by d0; operands (d0, d1, variance, range)


ANY = -1  # the arity of an operation that takes any number of operands


@dataclass(frozen=True, slots=True)
class OpRow:
    """Arity, printed form (`{0}` is the first operand) and whether the value is a flag."""

    arity: int
    form: str
    flag: bool = False


OPS: dict[Op, OpRow] = {
    Op.CONSTANT: OpRow(0, "constant"),
    Op.LEAF: OpRow(0, "leaf"),
    Op.LEVEL: OpRow(0, "level"),
    Op.LOW: OpRow(0, "low"),
    Op.HIGH: OpRow(0, "high"),
    Op.NORMAL: OpRow(0, "normal"),
    Op.UNIFORM: OpRow(0, "uniform"),
    Op.ADD: OpRow(2, "{0} + {1}"),
    Op.SUB: OpRow(2, "{0} - {1}"),
    Op.MUL: OpRow(2, "{0} * {1}"),
    Op.DIV: OpRow(2, "{0} / {1}"),
    Op.NEG: OpRow(1, "-{0}"),
    Op.POW: OpRow(2, "{0} ** {1}"),
    Op.MIN: OpRow(2, "min({0}, {1})"),
    Op.MAX: OpRow(2, "max({0}, {1})"),
    Op.ABS: OpRow(1, "abs({0})"),
    Op.EXP: OpRow(1, "exp({0})"),
    Op.LOG: OpRow(1, "log({0})"),
    Op.SQRT: OpRow(1, "sqrt({0})"),
    Op.LT: OpRow(2, "{0} < {1}", flag=True),
    Op.LE: OpRow(2, "{0} <= {1}", flag=True),
    Op.EQ: OpRow(2, "{0} == {1}", flag=True),
    Op.NE: OpRow(2, "{0} != {1}", flag=True),
    Op.AND: OpRow(2, "{0} and {1}", flag=True),
    Op.OR: OpRow(2, "{0} or {1}", flag=True),
    Op.NOT: OpRow(1, "not {0}", flag=True),
    Op.SELECT: OpRow(3, "{1} if {0} else {2}"),
    Op.STEP: OpRow(3, "{0} + {1} * {2}"),
    Op.BRIDGE_LOW: OpRow(4, "bridge_low({0}, {1}, variance {2}, {3})"),
    Op.BRIDGE_HIGH: OpRow(4, "bridge_high({0}, {1}, variance {2}, {3})"),
    Op.UNHIT: OpRow(ANY, "unhit"),
    Op.MOMENT: OpRow(1, "moment at {0}"),
    Op.BRIDGE_CLEAR: OpRow(3, "bridge_clear({0}, {1}, variance {2})"),
    Op.BRIDGE_CORRIDOR: OpRow(4, "bridge_corridor({0}, {1}, width {2}, variance {3})"),
    Op.BRIDGE_RANGE: OpRow(4, "bridge_range({0}, {1}, variance {2}, {3})"),
    Op.LOOKUP: OpRow(ANY, "lookup"),
    Op.BRIDGE_MOMENT: OpRow(4, "bridge_moment({0}, {1}, {2}, {3})"),
    Op.CORRIDOR_BY_START: OpRow(4, "corridor_by_start({0}, {1}, width {2}, variance {3})"),
    Op.CORRIDOR_BY_WIDTH: OpRow(4, "corridor_by_width({0}, {1}, width {2}, variance {3})"),
    Op.CORRIDOR_BY_ENDS: OpRow(4, "corridor_by_ends({0}, {1}, width {2}, variance {3})"),
    Op.RANGE_BY_START: OpRow(4, "range_by_start({0}, {1}, variance {2}, {3})"),
}
