"""The verifier notices each broken rule."""

from __future__ import annotations

import pytest

from mcx.tape.ops import Op
from mcx.tape.program import Instruction, Output, Tape
from mcx.tape.verify import problems

NORMAL = Instruction(Op.NORMAL, (), 0)


@pytest.mark.parametrize(
    ("instructions", "outputs", "part"),
    [
        ([NORMAL, Instruction(Op.ADD, (0,))], [], "1 operands, not 2"),
        ([Instruction(Op.NEG, (0,))], [], "not defined before it"),
        ([Instruction(Op.CONSTANT, (), "1")], [], "no float"),
        ([Instruction(Op.LEAF, (), 3)], [], "no Leaf"),
        ([NORMAL, Instruction(Op.NEG, (0,), 1.0)], [], "has a payload"),
        ([Instruction(Op.NORMAL, (), 1)], [], "dimension 1 of 1"),
        ([NORMAL], [Output("price", 1)], "no value of the tape"),
        ([NORMAL], [Output("price", 0), Output("price", 0)], "two outputs"),
        ([NORMAL, Instruction(Op.NOT, (0,))], [], "as a flag"),
        ([NORMAL], [Output("hit", 0, flag=True)], "no flag"),
    ],
)
def test_a_broken_tape_is_described(instructions: list, outputs: list, part: str):
    """Each kind of damage is named."""
    (problem,) = problems(Tape(tuple(instructions), tuple(outputs), normals=1))
    assert part in problem
