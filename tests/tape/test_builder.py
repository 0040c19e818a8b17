"""Building: common subexpressions, constant folding, exact simplifications."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from strategies import inputs_for, tapes

from mcx.faults import Place
from mcx.tape.builder import Builder
from mcx.tape.interpret import interpret, outputs
from mcx.tape.ops import Op
from mcx.tape.passes import drop_dead_code
from mcx.tape.program import Leaf, LeafKind, Output, Tape
from mcx.tape.verify import problems

LEAF = Leaf(LeafKind.TERM, name="strike")


def rebuilt(tape: Tape) -> Tape:
    """The tape put through the builder instruction by instruction."""
    builder, values = Builder(), []
    for step in tape.instructions:
        values.append(builder.copy(step, tuple(values[k] for k in step.operands)))
    return builder.tape((output.at(values[output.value]) for output in tape.outputs), tape.normals, tape.uniforms)


def test_equal_instructions_are_made_once():
    """Asking for the same value again gives the same number, in either order where the order does not matter."""
    tape = Builder()
    x, y = tape.input(Op.NORMAL, 0), tape.leaf(LEAF)
    assert tape.emit(Op.ADD, x, y) == tape.emit(Op.ADD, y, x)
    assert tape.emit(Op.SUB, x, y) != tape.emit(Op.SUB, y, x)
    assert str(tape.tape([])) == (
        "v0 = normal 0\n"
        "v1 = leaf term strike\n"
        "v2 = v0 + v1\n"
        "v3 = v0 - v1\n"
        "v4 = v1 - v0"
    )


def test_an_instruction_keeps_its_first_place():
    """The place that first asked for a value stays with it."""
    tape, place = Builder(), Place("a.yaml", 3, 5)
    x = tape.input(Op.NORMAL, 0)
    value = tape.emit(Op.EXP, x, place=place)
    tape.emit(Op.EXP, x, place=Place("a.yaml", 9, 9))
    assert tape.instructions[value].place == place


def test_constants_fold():
    """An operation on numbers is its result."""
    tape = Builder()
    value = tape.emit(Op.MUL, tape.constant(3.0), tape.emit(Op.SQRT, tape.constant(16.0)))
    assert tape.number(value) == 12.0


@pytest.mark.parametrize(
    ("op", "operands", "result"),
    [
        (Op.ADD, ("x", 0.0), "x"),
        (Op.SUB, ("x", 0.0), "x"),
        (Op.MUL, (1.0, "x"), "x"),
        (Op.DIV, ("x", 1.0), "x"),
        (Op.POW, ("x", 1.0), "x"),
        (Op.MIN, ("x", "x"), "x"),
        (Op.AND, ("f", 1.0), "f"),
        (Op.AND, ("f", 0.0), 0.0),
        (Op.OR, ("f", 1.0), 1.0),
        (Op.OR, (0.0, "f"), "f"),
        (Op.SELECT, (1.0, "x", "y"), "x"),
        (Op.SELECT, (0.0, "x", "y"), "y"),
        (Op.SELECT, ("f", "x", "x"), "x"),
        (Op.SELECT, ("f", 1.0, 0.0), "f"),
        (Op.LT, ("x", "x"), 0.0),
        (Op.LE, ("x", "x"), 1.0),
    ],
)
def test_trivial_operations_vanish(op: Op, operands: tuple, result: str | float):
    """What is equal to one of its operands, or to a number, adds no instruction."""
    tape = Builder()
    known = {"x": tape.input(Op.NORMAL, 0), "y": tape.input(Op.NORMAL, 1)}
    known["f"] = tape.emit(Op.LT, known["x"], known["y"])

    def value(operand: str | float) -> int:
        return known[operand] if isinstance(operand, str) else tape.constant(operand)

    assert tape.emit(op, *map(value, operands)) == value(result)


def test_double_negation_vanishes():
    """`not not f` is f, and a choice by `not f` is the other choice by f."""
    tape = Builder()
    x, y = tape.input(Op.NORMAL, 0), tape.input(Op.NORMAL, 1)
    flag = tape.emit(Op.LT, x, y)
    opposite = tape.emit(Op.NOT, flag)
    assert tape.emit(Op.NOT, opposite) == flag
    assert tape.emit(Op.SELECT, opposite, x, y) == tape.emit(Op.SELECT, flag, y, x)


def test_a_negative_is_subtracted():
    """x + -y and -y + x are x - y, x - -y is x + y: to the last bit, and one instruction less."""
    tape = Builder()
    x, y = tape.input(Op.NORMAL, 0), tape.input(Op.NORMAL, 1)
    minus = tape.emit(Op.NEG, y)
    assert tape.emit(Op.ADD, x, minus) == tape.emit(Op.ADD, minus, x) == tape.emit(Op.SUB, x, y)
    assert tape.emit(Op.SUB, x, minus) == tape.emit(Op.ADD, x, y)


def test_zero_times_x_stays():
    """x * 0 is not folded: x may be infinite."""
    tape = Builder()
    value = tape.emit(Op.MUL, tape.input(Op.NORMAL, 0), tape.constant(0.0))
    assert tape.number(value) is None


def test_a_square_is_a_product():
    """x ** 2 is x * x, correctly rounded and cheap."""
    tape = Builder()
    x = tape.input(Op.NORMAL, 0)
    assert tape.emit(Op.POW, x, tape.constant(2.0)) == tape.emit(Op.MUL, x, x)


@given(tapes())
def test_building_keeps_the_values(tape: Tape):
    """A random tape has the same outputs, to the last bit, after folding, sharing and dead code."""
    assert problems(tape) == []
    leaves, normals, uniforms = inputs_for(tape, 64, seed=5599320118842)
    values = dict(zip(tape.leaves, leaves))
    before = interpret(tape, leaves, normals, uniforms)
    finite = np.all([np.isfinite(np.broadcast_to(value, 64)) for value in before], axis=0)
    for after in (drop_dead_code(tape), rebuilt(tape), drop_dead_code(rebuilt(tape))):
        assert problems(after) == []
        found = interpret(after, [values[leaf] for leaf in after.leaves], normals, uniforms)
        for name, expected in outputs(tape, before).items():
            result = np.broadcast_to(outputs(after, found)[name], 64)
            np.testing.assert_array_equal(result[finite], np.broadcast_to(expected, 64)[finite])


def test_dead_code_goes_and_the_rest_keeps_its_order():
    """Only what an output needs stays."""
    tape = Builder()
    x, y = tape.input(Op.NORMAL, 0), tape.input(Op.NORMAL, 1)
    tape.emit(Op.EXP, x)
    total = tape.emit(Op.ADD, y, tape.constant(2.0))
    short = drop_dead_code(tape.tape([Output("total", total)], normals=2))
    assert str(short) == "v0 = normal 1\nv1 = constant 2.0\nv2 = v0 + v1\ntotal -> v2"
    assert short.normals == 2
