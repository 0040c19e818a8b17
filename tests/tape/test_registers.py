"""From tape to program."""

from __future__ import annotations

import numpy as np
from hypothesis import given
from strategies import inputs_for, tapes

from mcx.tape.builder import COMMUTATIVE, Builder
from mcx.tape.interpret import interpret
from mcx.tape.ops import OPS, Op
from mcx.tape.program import Leaf, LeafKind, Output, Program, Sum, Tape
from mcx.tape.registers import lower
from mcx.tape.rules import evaluate


def execute(program: Program, normals: np.ndarray, uniforms: np.ndarray) -> list[np.ndarray]:
    """The outputs of a program, run row by row as its docstring says."""
    rows = np.full((program.rows, normals.shape[1]), np.nan)
    rows[: program.normals], rows[program.normals : program.draws] = normals, uniforms

    def read(operand: int) -> np.ndarray | float:
        return rows[operand].copy() if operand >= 0 else program.scalars[-1 - operand]

    for op, destination, *sources in program.code.tolist():
        arity = 3 if op == Op.LOOKUP else OPS[Op(op)].arity
        assert program.draws <= destination < program.rows
        assert destination not in sources[:arity]
        assert not any(sources[arity:])
        assert any(source >= 0 for source in sources[:arity])
        if op in COMMUTATIVE:
            assert sources[0] >= 0
        operands = [read(source) for source in sources[:arity]]
        if op == Op.LOOKUP:
            operands[1:] = program.scalars[-1 - sources[1] : -sources[2]].tolist()
        rows[destination] = evaluate(Op(op), *operands)
    return [np.broadcast_to(read(operand), normals.shape[1]) for operand in program.outputs.tolist()]


@given(tapes())
def test_a_program_means_what_its_tape_means(tape: Tape):
    """Run row by row, a program gives the interpreter's outputs to the last bit."""
    leaves, normals, uniforms = inputs_for(tape, 16, seed=70331980562217)
    values = interpret(tape, leaves, normals, uniforms)
    found = execute(lower(tape, leaves), normals, uniforms)
    for output, result in zip(tape.outputs, found, strict=True):
        np.testing.assert_array_equal(result, np.broadcast_to(values[output.value], 16))


def chain(length: int) -> Tape:
    """exp of each of many normals, added up one by one."""
    tape = Builder()
    total = tape.constant(0.0)
    for number in range(length):
        total = tape.emit(Op.ADD, total, tape.emit(Op.EXP, tape.input(Op.NORMAL, number)))
    return tape.tape([Output("total", total)], normals=length)


def test_registers_are_used_again():
    """A sum over a thousand dates needs no more work registers than one over ten."""
    few, many = lower(chain(10), ()), lower(chain(1000), ())
    assert many.rows - many.draws == few.rows - few.draws == 3


def test_what_is_the_same_on_every_path_is_computed_once():
    """Leaves and their combinations become scalars, equal ones once; a constant output is a scalar."""
    tape = Builder()
    a, b = (tape.leaf(Leaf(LeafKind.TERM, name=name)) for name in "ab")
    x = tape.input(Op.NORMAL, 0)
    scaled = tape.emit(Op.MUL, tape.emit(Op.ADD, a, b), x)
    shifted = tape.emit(Op.ADD, tape.constant(5.0), scaled)
    program = lower(tape.tape([Output("price", shifted), Output("bond", a)], normals=1), [2.0, 3.0])
    assert program.code.tolist() == [[Op.MUL, 1, 0, -1, 0, 0], [Op.ADD, 2, 1, -1, 0, 0]]
    assert program.scalars.tolist() == [5.0, 2.0]
    assert program.outputs.tolist() == [2, -2]


def test_a_choice_that_is_the_same_on_every_path_costs_nothing():
    """What a leaf decides is read in the choice's place; a taken scalar is a scalar, also in a choice of a choice."""
    tape = Builder()
    barrier, x, y = tape.leaf(Leaf(LeafKind.TERM, name="barrier")), *(tape.input(Op.NORMAL, k) for k in (0, 1))
    flag = tape.emit(Op.LE, barrier, tape.constant(85.0))
    inner = tape.emit(Op.SELECT, flag, x, tape.emit(Op.EXP, y))
    outer = tape.emit(Op.SELECT, tape.emit(Op.NOT, flag), inner, tape.constant(3.0))
    wanted = Sum(tape.emit(Op.MUL, outer, inner), inner)
    made = tape.tape([Output("price", outer), Output("leg", inner)], normals=2, sums=[wanted])
    below, above = lower(made, [80.0]), lower(made, [90.0])
    assert below.code[:, 0].tolist() == [Op.EXP, Op.MUL] and below.scalars[-1 - below.outputs[0]] == 3.0
    assert below.outputs[1] == 0 and above.code[:, 0].tolist() == [Op.EXP, Op.MUL]
    assert above.outputs.tolist() == [above.code[0, 1]] * 2 and above.sums[0, 1] == above.outputs[0]
