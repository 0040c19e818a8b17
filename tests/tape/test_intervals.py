"""Intervals: no operation leaves the interval that follows from its operands, and narrowing never loses a value that
can be."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from mcx.tape.builder import Builder
from mcx.tape.intervals import ANYTHING, BACKWARD, FORWARD, NO, YES, Case, Intervals
from mcx.tape.ops import ANY, OPS, Op
from mcx.tape.program import LevelKey, Output
from mcx.tape.rules import RULES, evaluate
from mcx.tape.verify import FLAG_OPERANDS

INPUTS = {op for op, row in OPS.items() if row.arity == 0}
NUMBERS = st.floats(-50, 50).map(lambda x: round(x, 3))
ENDS = st.one_of(NUMBERS, st.sampled_from([-math.inf, math.inf, 0.0, 1.0, -1.0]))


@st.composite
def operand(draw: st.DrawFn, flag: bool) -> tuple[float, tuple[float, float]]:
    """A value, and an interval around it."""
    if flag:
        value = float(draw(st.booleans()))
        return value, draw(st.sampled_from([(value, value), (0.0, 1.0)]))
    value = draw(st.one_of(NUMBERS, st.sampled_from([0.0, 1.0, 2.0])))
    low, high = draw(ENDS), draw(ENDS)
    return value, (min(low, value), max(high, value))


@st.composite
def applied(draw: st.DrawFn, op: Op) -> tuple[list[float], list[tuple[float, float]]]:
    """Operands of an operation, each with an interval around it."""
    count = OPS[op].arity if OPS[op].arity != ANY else 3
    drawn = [draw(operand(k in FLAG_OPERANDS.get(op, ()))) for k in range(count)]
    values, intervals = [value for value, _ in drawn], [interval for _, interval in drawn]
    if op in (Op.BRIDGE_LOW, Op.BRIDGE_HIGH):
        values[2:], intervals[2:] = [abs(values[2]), 0.3], [(0.0, math.inf), (0.0, 1.0)]
    if op in (Op.BRIDGE_CLEAR, Op.BRIDGE_MOMENT):
        values[2], intervals[2] = abs(values[2]), (0.0, math.inf)
    if op is Op.LOOKUP:
        values[0], intervals[0] = abs(values[0]) % 2.0, (0.0, 2.0)
    return values, intervals


def holds(interval: tuple[float, float], value: float) -> bool:
    slack = 1e-9 * max(1.0, abs(value))
    return interval[0] - slack <= value <= interval[1] + slack


def test_every_operation_has_an_interval():
    assert set(FORWARD) == set(Op) - {Op.CONSTANT, Op.LEAF}
    assert set(BACKWARD) <= set(RULES)


@pytest.mark.parametrize("op", sorted(RULES))
@given(data=st.data())
def test_no_value_leaves_the_interval_of_its_operation(op: Op, data: st.DataObject):
    values, intervals = data.draw(applied(op))
    result = float(evaluate(op, *values))
    if math.isfinite(result):
        assert holds(FORWARD[op](*intervals), result), (values, intervals, result)


@pytest.mark.parametrize("op", sorted(BACKWARD))
@given(data=st.data())
def test_narrowing_keeps_the_operands_that_gave_the_result(op: Op, data: st.DataObject):
    values, intervals = data.draw(applied(op))
    result = float(evaluate(op, *values))
    if not math.isfinite(result):
        return
    flag = OPS[op].flag
    around = (result, result) if flag else (min(result, data.draw(ENDS)), max(result, data.draw(ENDS)))
    for value, interval in zip(values, BACKWARD[op](around, *intervals), strict=False):
        assert holds(interval, value), (values, intervals, result, around)


def made(build) -> tuple[Case, Builder, list[int]]:
    """The values that `build` puts on a tape with two levels."""
    builder = Builder()
    spot, other = (builder.input(Op.LEVEL, LevelKey(asset, 1.0)) for asset in (0, 1))
    values = build(builder, spot, other)
    tape = builder.tape([Output.of("price", values[-1])])
    return Case(Intervals(tape, None)), builder, values


def test_a_square_is_not_negative():
    case, _, (log, square) = made(lambda b, x, y: [b.emit(Op.LOG, x), b.emit(Op.MUL, b.emit(Op.LOG, x),
                                                                           b.emit(Op.LOG, x))])
    assert case[log] == ANYTHING and case[square] == (0.0, math.inf)


def test_a_condition_bounds_what_it_compares():
    """Below 80, a put struck at 100 pays 20 to 100; at 80 or above at most 20."""

    def build(b: Builder, x: int, _: int) -> list[int]:
        below = b.emit(Op.LT, x, b.constant(80.0))
        return [below, b.emit(Op.MAX, b.emit(Op.SUB, b.constant(100.0), x), b.constant(0.0))]

    case, _, (below, put) = made(build)
    assert case[put] == (0.0, 100.0)
    assert case.given({below: YES})[put] == (20.0, 100.0)
    assert case.given({below: NO})[put] == (0.0, 20.0)


def test_the_worst_bounds_each():
    def build(b: Builder, x: int, y: int) -> list[int]:
        return [b.emit(Op.LE, b.constant(60.0), b.emit(Op.MIN, x, y)), b.emit(Op.ADD, x, y)]

    case, _, (above, both) = made(build)
    assert case.given({above: YES})[both] == (120.0, math.inf)


def test_conditions_follow_through_logic():
    def build(b: Builder, x: int, y: int) -> list[int]:
        first, second = b.emit(Op.LT, x, b.constant(1.0)), b.emit(Op.LT, y, b.constant(1.0))
        either = b.emit(Op.OR, first, second)
        return [first, second, either, b.emit(Op.AND, b.emit(Op.NOT, first), either)]

    case, _, (first, second, either, only_second) = made(build)
    there = case.given({only_second: YES})
    assert (there[first], there[second], there[either]) == (NO, YES, YES)
    assert case.given({only_second: YES, second: NO}) is None
    assert case.given({either: NO})[second] == NO


def test_a_case_leaves_the_one_it_comes_from_alone():
    case, _, (below,) = made(lambda b, x, y: [b.emit(Op.LT, x, b.constant(80.0))])
    case.given({below: YES})
    assert case[below] == (0.0, 1.0)


def test_values_fixed_by_sums_and_products():
    def build(b: Builder, x: int, _: int) -> list[int]:
        share = b.emit(Op.DIV, x, b.constant(50.0))
        return [b.emit(Op.LE, b.emit(Op.SUB, share, b.constant(1.0)), b.constant(0.5)), b.emit(Op.MUL, x,
                                                                                             b.constant(-2.0))]

    case, _, (capped, short) = made(build)
    assert np.allclose(case.given({capped: YES})[short], (-150.0, 0.0))
